"""What a lot must meet, and what is done with it at every look."""

from __future__ import annotations

from dataclasses import dataclass

from budgets.budget import LARGEST_COUNT, Count, Procedure
from budgets.conformity import Tolerance
from budgets.decision_rules import DecisionRule
from budgets.error_distributions import Tabulated
from budgets.errors import ProcedureError
from budgets.reading_patterns import ReadingPattern


@dataclass(frozen=True)
class Demand:
    """What one specification demands of the characteristic.

    Parameters
    ----------
    code : str
    tolerance : Tolerance
    decision_rule : DecisionRule
    legal : bool
        Whether the limits are those of the law.
    domain : tuple of float or None
        Natural domain of the characteristic.
    truncated : bool
        Whether probabilities are those within the domain.
    distribution : Tabulated or None
        Monte Carlo quantiles, where the rule rests on them instead of Student's t.
    """

    code: str
    tolerance: Tolerance
    decision_rule: DecisionRule
    legal: bool = False
    domain: tuple[float | None, float | None] = (None, None)
    truncated: bool = False
    distribution: Tabulated | None = None


@dataclass(frozen=True)
class LotProcedure:
    """What is done at every look at a lot; a further look takes as many samples again.

    A lot that is held is read again as long as every rule that holds it plans a further round.

    Parameters
    ----------
    samples, readings_per_sample : int
    increments_per_sample : int
        A sample is a composite of so many increments.
    looks : int
        The most rounds that a rule plans.

    Raises
    ------
    ProcedureError
        If a number is below 1, or all looks together are more than a budget can have.
    """

    samples: int
    readings_per_sample: int
    increments_per_sample: int = 1
    looks: int = 1

    def __post_init__(self) -> None:
        for name in ("samples", "readings_per_sample", "increments_per_sample", "looks"):
            if getattr(self, name) < 1:
                raise ProcedureError(f"{name} must be at least 1", where=(name,))
        if max(self.samples * self.looks, self.readings_per_sample) > LARGEST_COUNT:
            raise ProcedureError(f"more than {LARGEST_COUNT} samples of a lot", where=("samples",))

    def done(self, looks: int) -> ReadingPattern:
        """Return all that has been done when so many looks are over.

        Parameters
        ----------
        looks : int

        Returns
        -------
        ReadingPattern
            The readings of a sample share its presentation. All looks share one session, the cautious
            default of a decision whose readings name none.
        """
        samples = [f"{look}/{sample}" for look in range(looks) for sample in range(self.samples)]
        labels = tuple(label for label in samples for _ in range(self.readings_per_sample))
        parts = {
            label: tuple(f"{label}/{part}" for part in range(self.increments_per_sample)) for label in samples
        }
        return ReadingPattern(
            {
                "presentation": labels,
                "increment": tuple(parts[label] for label in labels),
                "sample": labels,
                "session": ("",) * len(labels),
            }
        )

    def within(self, procedure: Procedure) -> Procedure:
        """Return the procedure of a budget that has this one: its own where that leaves room for it."""
        own = (procedure.samples, self.samples), (procedure.readings_per_sample, self.readings_per_sample)
        if all(count.least <= number <= count.most for count, number in own):
            return procedure
        return Procedure(*(Count(number, number, number) for _, number in own))
