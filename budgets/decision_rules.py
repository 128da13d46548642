"""Decision rules: how measurement uncertainty is taken into account when conformity is stated."""

from __future__ import annotations

import math
from dataclasses import dataclass

from budgets.conformity import Tolerance, measurement_capability_index
from budgets.errors import BudgetsError, LimitsError, NotSupportedError, raise_collected

_MEMBERS: dict[str, tuple[str, ...]] = {
    "simple": ("largest_standard_uncertainty", "least_capability_index"),
    "guarded_by_factor": ("multiple", "coverage_probability", "sides"),
    "guarded_by_specific_risk": ("largest_risk",),
    "guarded_by_global_risk": ("largest_risk", "specific_risk_cap"),
}
_OWN_MEMBERS = tuple(dict.fromkeys(name for members in _MEMBERS.values() for name in members))
REJECTIONS = ("at_tolerance_limit", "guarded")
LARGEST_ROUNDS = 10
LEAST_LEVEL, LARGEST_LEVEL = 0.5, 0.999999


@dataclass(frozen=True)
class DecisionRule:
    """A decision rule of a specification.

    Parameters
    ----------
    kind : {"simple", "guarded_by_factor", "guarded_by_specific_risk", "guarded_by_global_risk"}
    largest_standard_uncertainty : float, unit of the characteristic
        ``simple``: the measurement must not be worse than this.
    least_capability_index : float
        ``simple``: the measurement capability index must not be smaller. At least one of the two is needed.
    multiple : float
        ``guarded_by_factor``: the guard band is this multiple of U.
    coverage_probability : float
        ``guarded_by_factor``: of that U.
    sides : {1, 2}
        ``guarded_by_factor``: of the coverage interval of that U.
    largest_risk : float
        ``guarded_by_specific_risk``: largest probability that an accepted lot does not conform.
        ``guarded_by_global_risk``: largest global consumer's risk.
    specific_risk_cap : float
        ``guarded_by_global_risk``: largest specific risk of any lot.
    rejection : {"at_tolerance_limit", "guarded"}
        What is rejected: all that is outside of tolerance, or only what is proved to be.
    rounds : int
        How often a lot that is held may be judged, with all its readings joined.
    replicate_level : float
        Probability that replicates agree when nothing but their own spread separates them, from
        ``LEAST_LEVEL`` to ``LARGEST_LEVEL``; see `budgets.replicates`.
    largest_lot_risk : float
        Largest probability that a released lot misses any of what its specification requires; see
        `budgets.joint_conformance`.

    Raises
    ------
    LimitsError
        With all faults: a member that does not belong to the kind, is missing or outside of its range.
    NotSupportedError
        For several rounds of a rule by global risk.

    Notes
    -----
    Source: ISO/IEC 17025:2017, 3.7; JCGM 106:2012, 8.2 (simple acceptance with a condition on the
    measurement) and 8.3 (guard bands) (from memory).
    """

    kind: str
    largest_standard_uncertainty: float | None = None
    least_capability_index: float | None = None
    multiple: float | None = None
    coverage_probability: float | None = None
    sides: int | None = None
    largest_risk: float | None = None
    specific_risk_cap: float | None = None
    rejection: str = "at_tolerance_limit"
    rounds: int = 1
    replicate_level: float | None = None
    largest_lot_risk: float | None = None

    def __post_init__(self) -> None:
        if self.kind not in _MEMBERS:
            raise LimitsError(
                f"{self.kind!r} is no decision rule; there are {', '.join(_MEMBERS)}", where=("kind",)
            )
        faults = self._faults_of_presence()
        raise_collected(faults or [*self._faults_of_values(), *self._faults_of_common_members()])

    def _faults_of_presence(self) -> list[BudgetsError]:
        own = _MEMBERS[self.kind]
        given = [name for name in _OWN_MEMBERS if getattr(self, name) is not None]
        faults: list[BudgetsError] = [
            LimitsError(
                f"{name} does not belong to the rule {self.kind}, which has {', '.join(own)}", where=(name,)
            )
            for name in given
            if name not in own
        ]
        if self.kind == "simple":
            if not set(own) & set(given):
                faults.append(
                    LimitsError(
                        "simple acceptance needs a condition on the measurement: a largest standard "
                        "uncertainty or a least capability index",
                        where=("largest_standard_uncertainty",),
                    )
                )
            return faults
        faults += [
            LimitsError(f"the rule {self.kind} needs {name}", where=(name,))
            for name in own
            if name not in given
        ]
        return faults

    def _faults_of_values(self) -> list[BudgetsError]:
        faults: list[BudgetsError] = []
        for name in ("largest_standard_uncertainty", "least_capability_index", "multiple"):
            value = getattr(self, name)
            if value is not None and not (math.isfinite(value) and value > 0):
                faults.append(LimitsError(f"{name} must be a finite number above 0", where=(name,)))
        if self.sides not in (None, 1, 2):
            faults.append(LimitsError("sides must be 1 or 2", where=("sides",)))
        probability = self.coverage_probability
        least = 0.5 if self.sides == 1 else 0.0
        if probability is not None and not least < probability < 1:
            faults.append(
                LimitsError(
                    f"coverage_probability must lie between {least:g} and 1", where=("coverage_probability",)
                )
            )
        for name in ("largest_risk", "specific_risk_cap"):
            risk = getattr(self, name)
            if risk is not None and not 0 < risk < 0.5:
                faults.append(LimitsError(f"{name} must lie between 0 and 0.5", where=(name,)))
        return faults

    def _faults_of_common_members(self) -> list[BudgetsError]:
        faults: list[BudgetsError] = []
        if self.replicate_level is not None and not LEAST_LEVEL <= self.replicate_level <= LARGEST_LEVEL:
            faults.append(
                LimitsError(
                    f"replicate_level must lie between {LEAST_LEVEL:g} and {LARGEST_LEVEL:g}",
                    where=("replicate_level",),
                )
            )
        if self.largest_lot_risk is not None and not 0 < self.largest_lot_risk < 0.5:
            faults.append(
                LimitsError("largest_lot_risk must lie between 0 and 0.5", where=("largest_lot_risk",))
            )
        if self.rejection not in REJECTIONS:
            faults.append(LimitsError(f"rejection is {' or '.join(REJECTIONS)}", where=("rejection",)))
        if not 1 <= self.rounds <= LARGEST_ROUNDS:
            faults.append(LimitsError(f"rounds must lie between 1 and {LARGEST_ROUNDS}", where=("rounds",)))
        if self.kind == "guarded_by_global_risk" and self.rounds > 1:
            faults.append(NotSupportedError("several rounds of a rule by global risk", where=("rounds",)))
        if self.kind == "simple":
            # Without a guard band nothing is held about the value: there is nothing to mirror or to repeat.
            if self.rejection == "guarded":
                faults.append(
                    LimitsError("simple acceptance has no guard band to mirror", where=("rejection",))
                )
            if self.rounds > 1:
                faults.append(
                    LimitsError(
                        "simple acceptance holds nothing about the value, so there is no further round",
                        where=("rounds",),
                    )
                )
        return faults

    def check_condition(self, tolerance: Tolerance, standard_uncertainty: float) -> None:
        """Check the condition of simple acceptance on the measurement; the other rules have none.

        Parameters
        ----------
        tolerance : Tolerance
        standard_uncertainty : float, unit of the characteristic

        Raises
        ------
        LimitsError
            If the measurement does not meet it, with the figures.
        """
        largest = self.largest_standard_uncertainty
        if largest is not None and standard_uncertainty > largest:
            raise LimitsError(
                f"simple acceptance was agreed for a standard uncertainty of at most {largest:g}; this "
                f"measurement has {standard_uncertainty:.4g}",
                where=("largest_standard_uncertainty",),
            )
        least = self.least_capability_index
        if least is None:
            return
        index = measurement_capability_index(tolerance, standard_uncertainty)
        if index is None:
            raise LimitsError(
                "a capability index needs two tolerance limits; for one limit state the largest standard "
                "uncertainty",
                where=("least_capability_index",),
            )
        if index < least:
            raise LimitsError(
                f"simple acceptance was agreed for a capability index of at least {least:g}; this "
                f"measurement has {index:.4g}",
                where=("least_capability_index",),
            )
