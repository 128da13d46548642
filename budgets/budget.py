"""A budget: components, the procedure they are for, and the checks that nothing is counted twice."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from itertools import combinations

from budgets.budget_models import BIAS, faults_of_model
from budgets.components import Component
from budgets.correlations import Correlation, check_correlations
from budgets.errors import BudgetsError, ComponentError, EvidenceError, ModelError, raise_collected
from budgets.evidence.evaluation import merged
from budgets.measurement_models import MeasurementModel

LARGEST_COUNT = 50
BIAS_TREATMENTS = ("corrected", "in_guard_band")

# A source that was taken out of a remainder is back in the budget when a component contains it
# or is drawn anew at the level of that source.
_LEVEL_OF_SOURCE = {"repeatability": "reading", "presentation": "presentation"}


@dataclass(frozen=True)
class Count:
    """How many of something: at least, as planned, at most.

    Raises
    ------
    ComponentError
        Unless 1 <= least <= plan <= most <= 50.
    """

    least: int
    plan: int
    most: int

    def __post_init__(self) -> None:
        if not 1 <= self.least <= self.plan <= self.most <= LARGEST_COUNT:
            raise ComponentError(
                f"the counts must satisfy 1 <= least <= plan <= most <= {LARGEST_COUNT}; "
                f"got {self.least}, {self.plan}, {self.most}"
            )


@dataclass(frozen=True)
class Procedure:
    """What is done to judge a lot: so many samples, so many readings of each."""

    samples: Count
    readings_per_sample: Count

    def joined(self, rounds: int) -> Procedure:
        """Return what the readings of some rounds may be together: as many times the most of one.

        Parameters
        ----------
        rounds : int

        Returns
        -------
        Procedure
        """
        return Procedure(
            *(
                Count(count.least, count.plan, min(LARGEST_COUNT, rounds * count.most))
                for count in (self.samples, self.readings_per_sample)
            )
        )


@dataclass(frozen=True)
class Budget:
    """An uncertainty budget of one characteristic on one analyzer.

    Parameters
    ----------
    components : tuple of Component
        Of the characteristic's own quantity and of the quantity ``bias``.
    procedure : Procedure
    coverage_probability : float
        Of the expanded uncertainty that is reported.
    bias : float or None, unit of the characteristic
        Mean of (analyzer - reference); None when the model has no such quantity.
    bias_treatment : {"corrected", "in_guard_band"}
        Corrected: the estimate is reading minus bias. In the guard band: the estimate is the reading.
    validated_range : tuple of float, shape (2,), unit of the characteristic
        The estimate must lie inside for the evidence to speak of it.
    model : MeasurementModel or None
        None: the estimate is the mean reading, less the bias. Otherwise every bias is a quantity of the
        model, and ``bias`` is None.
    correlations : tuple of Correlation
        Between components of one quantity each; within one level.
    validated_box : mapping of str to tuple of float
        For the quantities of the model that are read: the range in which each was validated.

    Raises
    ------
    ComponentError, CorrelationError, ModelError, NotSupportedError
        With all faults found in ``faults``; double counting is one of them.

    Notes
    -----
    Without a model the estimate is ``reading - bias``: both sensitivity coefficients are of size one.
    """

    components: tuple[Component, ...]
    procedure: Procedure
    coverage_probability: float
    bias: float | None
    bias_treatment: str
    validated_range: tuple[float, float]
    model: MeasurementModel | None = None
    correlations: tuple[Correlation, ...] = ()
    validated_box: Mapping[str, tuple[float, float]] = field(default_factory=dict)

    def __post_init__(self) -> None:
        raise_collected(
            [
                *_faults_of_members(self),
                *_faults_of_names(self.components),
                *_faults_of_mean_squares(self.components),
                *(_faults_of_default_model(self) if self.model is None else faults_of_model(self)),
                *_double_counting(self.components),
                *_missing_sources(self.components),
                *_fewer_readings_than_studied(self),
            ]
        )
        check_correlations(
            self.correlations, {item.code: item.level for item in self.components if not item.matrix_terms}
        )

    @property
    def characteristic(self) -> str:
        """The quantity that is read, of a budget without a model."""
        return next(item.quantity for item in self.components if item.quantity != BIAS)

    @property
    def correction(self) -> float:
        """What is taken off the mean reading without a model: the bias, where it is corrected."""
        return 0.0 if self.bias is None or self.bias_treatment != "corrected" else self.bias

    def estimate(self, means: Mapping[str, float]) -> float:
        """Return the estimate of the measurand.

        Parameters
        ----------
        means : mapping of str to float
            Of every quantity that is read, the weighted mean over its readings.

        Returns
        -------
        float, unit of the characteristic
            Mean reading less bias, or the value of the measurement model: the mean first, then the model.

        Raises
        ------
        ModelError
            If the means are others than the budget reads, or the model has no value there.

        Notes
        -----
        Source: JCGM 100:2008, 4.1.4 (from memory), the second of its two ways: the model of the means.
        """
        if self.model is not None:
            return self.model.value(means)
        if set(means) != {self.characteristic}:
            raise ModelError(
                f"the one quantity that is read is {self.characteristic}",
                where=("means", self.characteristic),
            )
        return means[self.characteristic] - self.correction


def _faults_of_members(budget: Budget) -> list[BudgetsError]:
    faults: list[BudgetsError] = []
    if not 0 < budget.coverage_probability < 1:
        faults.append(
            ComponentError(
                f"the coverage probability {budget.coverage_probability} is not between 0 and 1",
                where=("coverage_probability",),
            )
        )
    if budget.bias_treatment not in BIAS_TREATMENTS:
        faults.append(
            ComponentError(
                f"the bias is treated as {' or '.join(BIAS_TREATMENTS)}, not {budget.bias_treatment!r}",
                where=("bias_treatment",),
            )
        )
    lower, upper = budget.validated_range
    if not (math.isfinite(lower) and math.isfinite(upper) and lower < upper):
        faults.append(
            ComponentError(
                f"the validated range must run from a lower to a higher finite value; got {lower} to {upper}",
                where=("validated_range",),
            )
        )
    return faults


def _faults_of_names(components: tuple[Component, ...]) -> list[BudgetsError]:
    faults: list[BudgetsError] = []
    if not components:
        faults.append(ComponentError("a budget needs at least one component", where=("components",)))
    seen: set[str] = set()
    for index, component in enumerate(components):
        if component.code in seen:
            faults.append(
                ComponentError(
                    f"two components are called {component.code!r}", where=("components", index, "code")
                )
            )
        seen.add(component.code)
    return faults


def _faults_of_mean_squares(components: tuple[Component, ...]) -> list[BudgetsError]:
    try:
        merged([term for item in components for term in (*item.terms, *item.relative_terms)])
    except EvidenceError as error:
        return [ComponentError(error.message, where=("components",))]
    return []


def _faults_of_default_model(budget: Budget) -> list[BudgetsError]:
    components = budget.components
    faults: list[BudgetsError] = [
        ComponentError(
            f"{component.code} is of several quantities: that needs a measurement model",
            where=("components", index, "quantities"),
        )
        for index, component in enumerate(components)
        if component.matrix_terms
    ]
    quantities = sorted({component.quantity for component in components if component.quantity} - {BIAS})
    if len(quantities) > 1:
        faults.append(
            ComponentError(
                f"several quantities beside the bias ({', '.join(quantities)}) need a measurement model",
                where=("components",),
            )
        )
    if components and not quantities and not faults:
        faults.append(
            ComponentError(
                "no component belongs to the reading itself, only to its bias", where=("components",)
            )
        )
    faults += [
        ComponentError(
            f"{component.code}: without a measurement model it can only be relative to the estimate",
            where=("components", index, "relative_to"),
        )
        for index, component in enumerate(components)
        if component.relative_to not in ("", *quantities)
    ]
    return [*faults, *_faults_of_bias(budget)]


def _faults_of_bias(budget: Budget) -> list[BudgetsError]:
    has_component = any(component.quantity == BIAS for component in budget.components)
    if budget.bias is None:
        if not has_component:
            return []
        return [ModelError("there are components of a bias, but the model has no bias", where=("bias",))]
    if not math.isfinite(budget.bias):
        return [ModelError("the bias must be a finite number", where=("bias",))]
    if has_component:
        return []
    return [
        ComponentError(
            "the model has a bias but no component gives its uncertainty; a bias that is not significant "
            "is not known to be zero, so u(bias) is a component in all cases",
            where=("components",),
        )
    ]


def _beyond_its_study(part: Component, whole: Component) -> bool:
    """Say whether ``part`` only adds what its study's averaging did not leave in ``whole``."""
    if part.covered_weight == 0 or whole.covered_weight > 0:
        return False
    return {*part.contains, "remainder"} <= set(whole.contains)


def _double_counting(components: tuple[Component, ...]) -> list[BudgetsError]:
    faults: list[BudgetsError] = []
    for (_, first), (index, second) in combinations(enumerate(components), 2):
        shared = [source for source in first.contains if source in second.contains]
        if not shared or not set(first.inputs) & set(second.inputs):
            continue
        if _beyond_its_study(first, second) or _beyond_its_study(second, first):
            continue
        advice = (
            "keep the larger of the two"
            if shared == ["resolution"]
            else "use the remainder instead of the whole, or leave one of them out"
        )
        faults.append(
            ComponentError(
                f"{first.code} and {second.code} both contain {' and '.join(shared)}: this would be counted "
                f"twice; {advice}",
                where=("components", index),
            )
        )
    return faults


def _missing_sources(components: tuple[Component, ...]) -> list[BudgetsError]:
    faults: list[BudgetsError] = []
    for index, component in enumerate(components):
        others = [
            other
            for other in components
            if other is not component and set(component.inputs) <= set(other.inputs)
        ]
        for source in component.taken_out:
            level = _LEVEL_OF_SOURCE[source]
            # A figure that says what it is, as the resolution of a display, is not all that varies there.
            if any(
                source in other.contains or (other.level == level and not other.contains) for other in others
            ):
                continue
            faults.append(
                ComponentError(
                    f"{source} was taken out of {component.code}, and no other component brings it back: "
                    f"add one at the level {level!r}",
                    where=("components", index),
                )
            )
        if component.covered_weight > 0 and not any(_beyond_its_study(component, other) for other in others):
            faults.append(
                ComponentError(
                    f"{component.code} counts only what its study did not cover; it stands beside the "
                    "standard error of prediction of the same study, or not at all",
                    where=("components", index),
                )
            )
    return faults


def _fewer_readings_than_studied(budget: Budget) -> list[BudgetsError]:
    """Find a whole standard error of prediction that promises more than the least readings keep.

    Its study averaged readings; with fewer of them the repeatability weighs more than it holds.
    """
    least = budget.procedure.samples.least * budget.procedure.readings_per_sample.least
    faults: list[BudgetsError] = []
    for index, whole in enumerate(budget.components):
        holds_it = {"repeatability", "remainder"} <= set(whole.contains) and whole.covered_weight == 0
        if not holds_it or 1 / least <= whole.reading_weight * (1 + 1e-9):
            continue
        if any(
            set(whole.inputs) <= set(part.inputs) and _beyond_its_study(part, whole)
            for part in budget.components
        ):
            continue
        faults.append(
            ComponentError(
                f"the study of {whole.code} averaged readings (a mean weight of {whole.reading_weight:.3g} "
                f"for each), the procedure asks for as few as {least}: add repeatability_beyond_study of "
                "that study, or plan as many readings",
                where=("components", index),
            )
        )
    return faults
