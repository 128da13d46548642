"""Trials of a measurand: what a Monte Carlo method draws again and again."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from budgets.errors import BudgetsError, ModelError, raise_collected
from budgets.input_distributions import InputDistribution
from budgets.joint_distributions import JointNormal
from budgets.measurement_models import MeasurementModel

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Trials:
    """How values of the measurand are drawn.

    Parameters
    ----------
    draw : callable
        Takes a ``numpy.random.Generator`` and a size and returns as many values.
    smallest_degrees_of_freedom : float
        Of all that goes in: with 2 or fewer the values have no standard deviation, with 1 or fewer no mean.
    remarks : tuple of str
        What was assumed beyond the distributions given.
    """

    draw: Callable[[np.random.Generator, int], Array]
    smallest_degrees_of_freedom: float = math.inf
    remarks: tuple[str, ...] = ()


def model_trials(
    model: MeasurementModel,
    inputs: Mapping[str, InputDistribution],
    *,
    joint: Sequence[JointNormal] = (),
) -> Trials:
    """Return the trials of a measurement model whose input quantities have these distributions.

    Parameters
    ----------
    model : MeasurementModel
    inputs : mapping of str to InputDistribution
        Of single quantities.
    joint : sequence of JointNormal
        Of quantities that are correlated. A given quantity of the model that stands nowhere keeps its value.

    Returns
    -------
    Trials

    Raises
    ------
    ModelError
        If a quantity has no distribution, has two, or is none of the model.

    Notes
    -----
    Source: JCGM 101:2008, 7.3 and 7.4 (from memory).
    """
    named = [*inputs, *(name for item in joint for name in item.quantities)]
    faults: list[BudgetsError] = [
        ModelError(f"{name} has no distribution", where=("inputs", name))
        for name in model.read
        if name not in named
    ]
    faults += [
        ModelError(f"{name!r} is no quantity of the model, or has two distributions", where=("inputs", name))
        for name in dict.fromkeys(named)
        if name not in model.names or named.count(name) > 1
    ]
    raise_collected(faults)

    def draw(generator: np.random.Generator, size: int) -> Array:
        values = {name: item.draw(generator, size) for name, item in inputs.items()}
        for item in joint:
            values.update(zip(item.quantities, item.draw(generator, size), strict=True))
        return model_values(model, values)

    single = [item.degrees_of_freedom for item in inputs.values()]
    return Trials(draw, min(single + [item.degrees_of_freedom for item in joint]))


def model_values(model: MeasurementModel, values: Mapping[str, Array]) -> Array:
    """Return the values of a model at draws of its quantities.

    Parameters
    ----------
    model : MeasurementModel
    values : mapping of str to ndarray, shape (n,)

    Returns
    -------
    ndarray, shape (n,)

    Raises
    ------
    ModelError
        If the model has no value at one of the draws: its input quantities reach where it has none.
    """
    try:
        return model.values(values)
    except ModelError as error:
        raise ModelError(
            f"a Monte Carlo trial met estimates at which the model has no value ({error.message}); the "
            "distributions of its quantities reach too far",
            where=error.where,
        ) from error
