"""Components: the lines of an uncertainty budget."""

from __future__ import annotations

import math
from dataclasses import dataclass

from budgets.errors import ComponentError, EvidenceError
from budgets.evidence.evaluation import Estimate, Term, effective_degrees_of_freedom, merged, variance
from budgets.levels import LEVELS

__all__ = ["LEVELS", "Component"]

DISTRIBUTIONS = ("normal", "rectangular", "triangular", "trapezoidal", "arcsine")


@dataclass(frozen=True)
class Component:
    """One source of uncertainty in a budget.

    Parameters
    ----------
    code : str
        Name of the line, unique in its budget.
    quantity : str
        Input quantity of the measurement model that it belongs to: the characteristic, or ``bias``.
    level : str
        One of ``LEVELS``: where the error is drawn anew.
    terms : tuple of Term
        Variance of ONE draw as a sum over independent mean squares.
    evaluation_type : {"A", "B"}
        Type of evaluation in the sense of the GUM.
    distribution : str
        Shape of the input distribution.
    covered_weight : float
        Averaging weight already contained in another component of the budget.
    contains : tuple of str
        Sources inside it.
    source : str
        Name of the estimate it was made from.
    taken_out : tuple of str
        Sources subtracted from it, to be named by other components.
    reading_weight : float
        Mean of 1/(readings averaged) behind it; 1 when every value behind it was a single reading.

    Raises
    ------
    ComponentError
        If a member is outside of what it may be, or the variance is not above zero.

    Notes
    -----
    Source: JCGM 100:2008, 2.3.2 and 2.3.3 (from memory) for Type A and Type B.
    """

    code: str
    quantity: str
    level: str
    terms: tuple[Term, ...]
    evaluation_type: str
    distribution: str = "normal"
    covered_weight: float = 0.0
    contains: tuple[str, ...] = ()
    source: str = ""
    taken_out: tuple[str, ...] = ()
    reading_weight: float = 1.0

    def __post_init__(self) -> None:
        if self.level not in LEVELS:
            raise ComponentError(
                f"component {self.code}: {self.level!r} is no level; the levels are {', '.join(LEVELS)}",
                where=("level",),
            )
        if self.evaluation_type not in ("A", "B"):
            raise ComponentError(
                f"component {self.code}: the evaluation is of Type A or of Type B, "
                f"not {self.evaluation_type!r}",
                where=("evaluation_type",),
            )
        if self.distribution not in DISTRIBUTIONS:
            raise ComponentError(
                f"component {self.code}: {self.distribution!r} is none of {', '.join(DISTRIBUTIONS)}",
                where=("distribution",),
            )
        if not 0 <= self.covered_weight <= 1:
            raise ComponentError(
                f"component {self.code}: the covered weight {self.covered_weight} is not within 0 to 1",
                where=("covered_weight",),
            )
        self._check_variance()

    def _check_variance(self) -> None:
        try:
            value = variance(merged(self.terms))
        except EvidenceError as error:
            raise ComponentError(f"component {self.code}: {error.message}", where=("terms",)) from error
        if not (math.isfinite(value) and value > 0):
            raise ComponentError(
                f"component {self.code}: its variance is {value:.6g}; a component needs a finite variance "
                "above zero (a difference of variances that is not above zero proves nothing)",
                where=("terms",),
            )

    @property
    def variance(self) -> float:
        """Variance of one draw, unit squared."""
        return variance(self.terms)

    @property
    def standard_uncertainty(self) -> float:
        """Standard uncertainty of one draw, in the unit of the characteristic."""
        return math.sqrt(self.variance)

    @property
    def degrees_of_freedom(self) -> float:
        """Degrees of freedom of one draw; ``math.inf`` when known."""
        return effective_degrees_of_freedom(self.terms)

    @classmethod
    def from_estimate(
        cls,
        code: str,
        quantity: str,
        level: str | None,
        estimate: Estimate,
        evaluation_type: str,
        *,
        distribution: str = "normal",
    ) -> Component:
        """Return the component that an estimate feeds.

        Parameters
        ----------
        code, quantity : str
            As in `Component`.
        level : str or None
            None takes the default level of the estimate.
        estimate : Estimate
        evaluation_type : {"A", "B"}
        distribution : str

        Returns
        -------
        Component

        Raises
        ------
        ComponentError
            If the estimate is not usable or may not feed this level.
        """
        if not estimate.usable:
            raise ComponentError(
                f"component {code}: the estimate {estimate.name!r} is shown but not usable, because it is "
                "not significantly above zero; an honest zero is not a usable standard uncertainty",
                where=("evidence", "estimate"),
            )
        chosen = estimate.may_feed[0] if level is None else level
        if chosen not in estimate.may_feed:
            raise ComponentError(
                f"component {code}: the estimate {estimate.name!r} may feed the level "
                f"{' or '.join(estimate.may_feed)}, not {chosen!r}",
                where=("level",),
            )
        return cls(
            code=code,
            quantity=quantity,
            level=chosen,
            terms=estimate.terms,
            evaluation_type=evaluation_type,
            distribution=distribution,
            covered_weight=estimate.covered_weight,
            contains=estimate.contains,
            source=estimate.name,
            taken_out=estimate.taken_out,
            reading_weight=estimate.reading_weight,
        )
