"""Checks of a budget whose measurement model is an expression."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Protocol

from budgets.components import Component
from budgets.errors import BudgetsError, ComponentError, ModelError, NotSupportedError
from budgets.measurement_models import MeasurementModel

BIAS = "bias"


class _WithModel(Protocol):
    """What is checked here of a budget."""

    @property
    def components(self) -> tuple[Component, ...]: ...
    @property
    def bias(self) -> float | None: ...
    @property
    def bias_treatment(self) -> str: ...
    @property
    def model(self) -> MeasurementModel | None: ...
    @property
    def validated_box(self) -> Mapping[str, tuple[float, float]]: ...


def faults_of_model(budget: _WithModel) -> list[BudgetsError]:
    """Find what does not fit together between a budget and its measurement model.

    Parameters
    ----------
    budget : Budget
        With a model.

    Returns
    -------
    list of BudgetsError
    """
    model = budget.model
    assert model is not None  # the caller asked
    faults: list[BudgetsError] = []
    if budget.bias is not None:
        faults.append(
            ModelError("with a measurement model every bias is one of its quantities", where=("bias",))
        )
    if budget.bias_treatment != "corrected":
        faults.append(
            NotSupportedError(
                "a bias left to the guard band beside a measurement model; correct it in the model",
                where=("bias_treatment",),
            )
        )
    return [
        *faults,
        *_faults_of_quantities(budget.components, model),
        *_faults_of_box(budget.validated_box, model),
    ]


def _faults_of_quantities(components: Sequence[Component], model: MeasurementModel) -> list[BudgetsError]:
    faults: list[BudgetsError] = []
    for index, component in enumerate(components):
        where = ("components", index)
        member = "quantities" if component.matrix_terms else "quantity"
        faults += [
            ComponentError(
                f"{component.code} belongs to {name!r}, which is no quantity of the model; there are "
                f"{', '.join(model.names)}",
                where=(*where, member),
            )
            for name in component.inputs
            if name not in model.names
        ]
        given = [name for name in component.inputs if name in model.given]
        if given and len(given) < len(component.inputs):
            faults.append(
                ComponentError(
                    f"{component.code}: its quantities are all read, and averaged, or all given",
                    where=(*where, member),
                )
            )
        if component.relative_to not in ("", *model.names):
            faults.append(
                ComponentError(
                    f"{component.code} is relative to {component.relative_to!r}, no quantity of the model",
                    where=(*where, "relative_to"),
                )
            )
    covered = {name for component in components for name in component.inputs}
    # A constant that is known exactly is a number in the expression.
    faults += [
        ComponentError(
            f"no component gives the uncertainty of {name}; a bias, too, is not known to be zero",
            where=("components",),
        )
        for name in model.names
        if name not in covered
    ]
    return faults


def _faults_of_box(box: Mapping[str, tuple[float, float]], model: MeasurementModel) -> list[BudgetsError]:
    faults: list[BudgetsError] = []
    for name, (lower, upper) in box.items():
        if name not in model.read:
            faults.append(ModelError(f"{name!r} is no quantity that is read", where=("validated_box", name)))
        if not (math.isfinite(lower) and math.isfinite(upper) and lower < upper):
            faults.append(
                ModelError(
                    f"the validated range of {name} must run from a lower to a higher finite value",
                    where=("validated_box", name),
                )
            )
    return faults
