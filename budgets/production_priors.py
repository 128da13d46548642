"""Production priors: how the true values of a product's lots are distributed, before one is measured."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property, lru_cache

import numpy as np
from numpy.typing import NDArray

from budgets.distribution_tables import student_density
from budgets.error_distributions import StudentT
from budgets.errors import LimitsError

Array = NDArray[np.float64]

DISTRIBUTIONS = ("normal", "t", "empirical")
ANCHORS = ("true_values", "readings")
LEAST_EMPIRICAL_VALUES = 30
# Beyond 12 standard deviations a normal distribution holds less than 1e-32; of t, what is left out is 1e-22.
_NORMAL_REACH, _NORMAL_STEP, _NEGLIGIBLE = 12.0, 2.0, 1e-22
_AT_ONCE = 20_000
_ROOT = math.sqrt(2 * math.pi)


@dataclass(frozen=True)
class Steering:
    """How the readings of a steered process go with its true values, both observed on the same lots.

    Parameters
    ----------
    mean_of_readings, standard_deviation_of_readings : float, unit of the characteristic
        Of the estimates that lots are judged by.
    correlation : float
        Between true value and estimate; below the value of an unsteered process, often below zero.

    Raises
    ------
    LimitsError
        If a figure is not finite, the deviation not above zero, or the correlation not inside (-1, 1).
    """

    mean_of_readings: float
    standard_deviation_of_readings: float
    correlation: float

    def __post_init__(self) -> None:
        _check_finite("mean_of_readings", self.mean_of_readings)
        _check_spread("standard_deviation_of_readings", self.standard_deviation_of_readings)
        if not -1 < self.correlation < 1:
            text = f"a correlation of {self.correlation:g} is not between -1 and 1"
            raise LimitsError(text, where=("correlation",))


@dataclass(frozen=True)
class ProductionPrior:
    """The distribution of the true values of lots.

    Parameters
    ----------
    distribution : {"normal", "t", "empirical"}
    mean, standard_deviation : float, unit of the characteristic
        Of the distribution itself; of ``t`` too the standard deviation, not the scale.
    degrees_of_freedom : float
        Of ``t``, above 2.
    values : tuple of float, unit of the characteristic
        Of ``empirical``: values of lots, at least 30. Each stands for a normal distribution around it.
    anchor : {"true_values", "readings"}
        Where the mean is known from. From ``readings`` of the analyzer: then its common error moves the
        true values behind the same readings. From ``true_values`` (reference values): it moves the readings.
    steering : Steering or None
        Of a process that is steered by the analyzer that judges it: truth and error go against each other,
        and only what was observed of both together says how.

    Raises
    ------
    LimitsError
        With a spread that is not above zero, degrees of freedom of 2 or less, or members that do not belong
        together.

    Notes
    -----
    Source: JCGM 106:2012, 6.2 and 9.1 (from memory). The smoothing of the empirical one keeps mean and
    standard deviation; its width is that of Silverman, Density Estimation (1986), 3.4.2 (from memory).
    """

    distribution: str
    mean: float
    standard_deviation: float
    degrees_of_freedom: float = math.inf
    values: tuple[float, ...] = ()
    anchor: str = "true_values"
    steering: Steering | None = None

    def __post_init__(self) -> None:
        for name, value, known in (
            ("distribution", self.distribution, DISTRIBUTIONS),
            ("anchor", self.anchor, ANCHORS),
        ):
            if value not in known:
                raise LimitsError(f"{value!r} is none of {', '.join(known)}", where=(name,))
        _check_finite("mean", self.mean)
        _check_spread("standard_deviation", self.standard_deviation)
        self._check_shape()
        if self.steering is not None and (self.distribution, self.anchor) != ("normal", "true_values"):
            text = "the prior of a steered process is normal and made of reference values"
            raise LimitsError(text, where=("steering",))

    def _check_shape(self) -> None:
        finite = math.isfinite(self.degrees_of_freedom)
        if self.distribution == "t" and not (finite and self.degrees_of_freedom > 2):
            raise LimitsError(
                f"a t distribution with {self.degrees_of_freedom:g} degrees of freedom has no standard "
                "deviation; more than 2 are needed, that is more lots",
                where=("degrees_of_freedom",),
            )
        if self.distribution != "t" and finite:
            text = f"degrees of freedom belong to t, not to {self.distribution}"
            raise LimitsError(text, where=("degrees_of_freedom",))
        if self.distribution == "empirical" and len(self.values) < LEAST_EMPIRICAL_VALUES:
            raise LimitsError(
                f"{len(self.values)} lots do not show the shape of a distribution; "
                f"{LEAST_EMPIRICAL_VALUES} are needed, or state a normal one",
                where=("values",),
            )
        if self.distribution != "empirical" and self.values:
            raise LimitsError(f"values belong to empirical, not to {self.distribution}", where=("values",))

    @classmethod
    def empirical(cls, values: Sequence[float], *, anchor: str = "true_values") -> ProductionPrior:
        """Return the prior that follows the values of lots.

        Parameters
        ----------
        values : sequence of float, unit of the characteristic
        anchor : {"true_values", "readings"}

        Returns
        -------
        ProductionPrior

        Raises
        ------
        LimitsError
            If there are fewer than 30 or they do not differ.
        """
        array = np.asarray(values, dtype=np.float64)
        deviation = float(array.std(ddof=1)) if array.size > 1 else 0.0
        kept = tuple(array.tolist())
        centre = float(array.mean()) if kept else 0.0
        return cls("empirical", centre, deviation, math.inf, kept, anchor)

    @cached_property
    def _centres(self) -> Array:
        values = np.asarray(self.values)
        shrunk = math.sqrt(1 - (self._width / self.standard_deviation) ** 2)
        return self.mean + (values - self.mean) * shrunk

    @cached_property
    def _width(self) -> float:
        """Of the normal distribution around every value of an empirical prior."""
        quartiles = np.quantile(self.values, [0.25, 0.75])
        spread = float(quartiles[1] - quartiles[0]) / 1.34 or self.standard_deviation
        return float(0.9 * min(self.standard_deviation, spread) * len(self.values) ** -0.2)

    @property
    def _scale(self) -> float:
        """Of the standardised distribution that density and tails are taken from."""
        nu = self.degrees_of_freedom
        return self.standard_deviation if math.isinf(nu) else self.standard_deviation * math.sqrt(1 - 2 / nu)

    def density(self, x: Array) -> Array:
        """Return the probability density at x, in one per unit of the characteristic.

        Parameters
        ----------
        x : ndarray, any shape, unit of the characteristic

        Returns
        -------
        ndarray, shape of x
        """
        if self.distribution == "t":
            return student_density((x - self.mean) / self._scale, self.degrees_of_freedom) / self._scale
        if self.distribution == "normal":
            z = (x - self.mean) / self._scale
            np.multiply(z, z, out=z)
            z *= -0.5
            np.exp(z, out=z)
            z *= 1 / (_ROOT * self._scale)
            return z
        total = np.zeros_like(x)
        # As many centres at once as fit into the processor's cache.
        several = max(1, _AT_ONCE // max(1, x.size))
        for start in range(0, self._centres.size, several):
            z = (x[..., None] - self._centres[start : start + several]) / self._width
            total += np.exp(-0.5 * z * z).sum(axis=-1)
        return total / (_ROOT * self._width * self._centres.size)

    @cached_property
    def marks(self) -> Array:
        """Places that part the axis into pieces in each of which the density is smooth."""
        if self.distribution == "empirical":
            low, high = self._centres.min(), self._centres.max()
            reach = _NORMAL_REACH * self._width
            pieces = math.ceil((high - low + 2 * reach) / (_NORMAL_STEP * self._width))
            return np.linspace(low - reach, high + reach, pieces + 1)
        return self.mean + self._scale * standard_marks(self.degrees_of_freedom)


@lru_cache(maxsize=64)
def standard_marks(degrees_of_freedom: float) -> Array:
    """Return places that part the axis of a standardised distribution where it is smooth in between.

    Parameters
    ----------
    degrees_of_freedom : float
        ``math.inf`` for the normal distribution.

    Returns
    -------
    ndarray, ascending, symmetric around 0
        Read-only.
    """
    if math.isinf(degrees_of_freedom):
        number = round(2 * _NORMAL_REACH / _NORMAL_STEP)
        return _kept(np.linspace(-_NORMAL_REACH, _NORMAL_REACH, number + 1))
    # Steps that grow as fast as the distribution flattens out.
    growth = 1 + min(1.0, 3 / math.sqrt(degrees_of_freedom))
    found = [0.0, 0.75, 1.5]
    while StudentT(degrees_of_freedom).upper_tail(found[-1]) > _NEGLIGIBLE:
        found.append(max(found[-1] + 0.75, found[-1] * growth))
    half = np.asarray(found)
    return _kept(np.concatenate((-half[:0:-1], half)))


def _kept(marks: Array) -> Array:
    """Return marks that are used again, and by nobody changed."""
    marks.setflags(write=False)
    return marks


def _check_finite(name: str, value: float) -> None:
    if not math.isfinite(value):
        raise LimitsError(f"{name} must be a finite number", where=(name,))


def _check_spread(name: str, value: float) -> None:
    if not 0 < value < math.inf:
        raise LimitsError(
            f"{name} is {value:g}; it must be above 0: lots that do not differ are no production",
            where=(name,),
        )
