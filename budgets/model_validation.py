"""Whether the law of propagation may be used for a model, over the box in which it was validated.

Bounds over cells show that the model has a value everywhere. At every point of a grid it is computed at
points one and more standard deviations away, along the directions of its inputs' covariance. Where value and
variance found there differ from those of the law of propagation, the model curves within its uncertainty, and
the law may not be used.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from itertools import product
from typing import Any

import numpy as np
import uncertainties

from budgets.errors import ConvergenceError, ModelError, NotSupportedError
from budgets.joint_distributions import root_of
from budgets.linear_propagation import CompiledPropagation, Propagated

LARGEST_DIFFERENCE = 0.05
MOST_READ = 8
# Up to so many quantities the middle of each side is a point of the grid, too.
_WITH_MIDDLES = 5


@dataclass(frozen=True)
class ValidatedBox:
    """Where the law of propagation was validated, and what was found.

    Parameters
    ----------
    ranges : mapping of str to tuple of float
        For every quantity that is read.
    points : int
        Of the grid.
    largest_difference : float
        Between the standard uncertainties of the two ways, relative; and of the shift of the mean.
    smallest_standard_uncertainty, degrees_of_freedom_there : float
        At the point of the grid where it is least uncertain.
    largest_standard_uncertainty : float
    """

    ranges: Mapping[str, tuple[float, float]]
    points: int
    largest_difference: float
    smallest_standard_uncertainty: float
    degrees_of_freedom_there: float
    largest_standard_uncertainty: float

    def to_document(self) -> dict[str, Any]:
        """Return the box as JSON-able members; null stands for infinite degrees of freedom."""
        freedom = self.degrees_of_freedom_there
        return {
            "ranges": {name: list(ends) for name, ends in self.ranges.items()},
            "points": self.points,
            "largest_difference": self.largest_difference,
            "smallest_standard_uncertainty": self.smallest_standard_uncertainty,
            "degrees_of_freedom_there": freedom if math.isfinite(freedom) else None,
            "largest_standard_uncertainty": self.largest_standard_uncertainty,
        }

    @classmethod
    def from_document(cls, document: Mapping[str, Any]) -> ValidatedBox:
        """Return the box that `to_document` wrote."""
        members = dict(document)
        freedom = members["degrees_of_freedom_there"]
        members["degrees_of_freedom_there"] = math.inf if freedom is None else freedom
        members["ranges"] = {name: (ends[0], ends[1]) for name, ends in members["ranges"].items()}
        return cls(**members)


def validate_over_box(law: CompiledPropagation, ranges: Mapping[str, tuple[float, float]]) -> ValidatedBox:
    """Validate the law of propagation over a grid.

    Parameters
    ----------
    law : CompiledPropagation
    ranges : mapping of str to tuple of float
        For every quantity that is read.

    Returns
    -------
    ValidatedBox

    Raises
    ------
    ModelError
        If a range is missing, the model fails or may have a pole somewhere in the box, or it curves too much
        there.
    ComponentError
        If the combined variance is not above zero somewhere.
    NotSupportedError
        For more than eight quantities that are read.
    ConvergenceError
        If the derivatives of the package `uncertainties` are others than those of this program.

    Notes
    -----
    Points ``x ± sqrt(n) L_i``, L a root of the covariance. Source: Julier and Uhlmann 1997, the unscented
    transformation (from memory). It costs so little that every point of the grid has its turn; approval
    holds the worst of them against Monte Carlo runs, see `budgets.budget_validation`.
    """
    missing = [name for name in law.model.read if name not in ranges]
    if missing:
        raise ModelError(f"the validated range of {', '.join(missing)} is missing", where=("validated_box",))
    if len(law.model.read) > MOST_READ:
        raise NotSupportedError(f"more than {MOST_READ} quantities that are read in one characteristic")
    law.model.refuse_gaps({name: ranges[name] for name in law.model.read})
    _compare_derivatives(law, {name: (low + high) / 2 for name, (low, high) in ranges.items()})
    largest, results = 0.0, []
    for point in _grid(law.model.read, ranges):
        result = law.at(point)
        difference = _difference(law, point, result)
        if difference > LARGEST_DIFFERENCE:
            place = ", ".join(f"{name} = {value:g}" for name, value in point.items())
            raise ModelError(
                f"at {place} the model curves within its uncertainty: value or standard uncertainty would be "
                f"wrong by {100 * difference:.0f} % of the standard uncertainty, so the law of propagation "
                "may not be used there",
                where=("validated_box",),
            )
        largest = max(largest, difference)
        results.append(result)
    least = min(results, key=lambda result: result.standard_uncertainty)
    return ValidatedBox(
        dict(ranges),
        len(results),
        largest,
        least.standard_uncertainty,
        least.effective_degrees_of_freedom,
        max(result.standard_uncertainty for result in results),
    )


def grid_by_difference(
    law: CompiledPropagation, ranges: Mapping[str, tuple[float, float]]
) -> list[dict[str, float]]:
    """Return the points of the grid over a box, those first where the law of propagation is worst.

    Parameters
    ----------
    law : CompiledPropagation
    ranges : mapping of str to tuple of float
        For every quantity that is read.

    Returns
    -------
    list of dict of str to float
    """
    points = list(_grid(law.model.read, ranges))
    return sorted(points, key=lambda point: -_difference(law, point, law.at(point)))


def _grid(names: tuple[str, ...], ranges: Mapping[str, tuple[float, float]]) -> Iterator[dict[str, float]]:
    def side(name: str) -> tuple[float, ...]:
        low, high = ranges[name]
        return (low, (low + high) / 2, high) if len(names) <= _WITH_MIDDLES else (low, high)

    for point in product(*(side(name) for name in names)):
        yield dict(zip(names, point, strict=True))


def _difference(law: CompiledPropagation, point: Mapping[str, float], result: Propagated) -> float:
    """Return the larger relative difference: of the standard uncertainty, and of the mean."""
    full = law.model.estimates(point)
    root = root_of(law.input_covariance(full))
    number = len(root)
    steps = math.sqrt(number) * np.concatenate([root.T, -root.T])
    centre = np.array([full[name] for name in law.model.names])
    values = law.model.values(dict(zip(law.model.names, (centre + steps).T, strict=True)))
    u = result.standard_uncertainty
    shift = abs(float(values.mean()) - result.estimate) / u
    return max(shift, abs(float(values.std()) / u - 1))


def _compare_derivatives(law: CompiledPropagation, point: Mapping[str, float]) -> None:
    full = law.model.estimates(point)
    own = law.model.sensitivity_coefficients(full)
    numbers = {name: uncertainties.ufloat(value, 1.0) for name, value in full.items()}
    other = law.model.uncertain_value(numbers).derivatives
    size = max(abs(slope) for slope in own.values())
    for name, number in numbers.items():
        if not abs(own[name] - other.get(number, 0.0)) <= 1e-6 * size:
            raise ConvergenceError(
                f"two ways to the sensitivity coefficient of {name} differ: {own[name]:.9g} and "
                f"{other.get(number, 0.0):.9g}"
            )
