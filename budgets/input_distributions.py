"""Distributions of input quantities as a Monte Carlo method draws them: all of JCGM 101, Table 1.

Each is a frozen record of what is known of a quantity and draws values of it. Those of several quantities
together are in `budgets.joint_distributions`; the shapes of errors about zero that components name are in
`budgets.distributions`.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from budgets.distributions import check_shape, draws, relative_half_width
from budgets.errors import ComponentError

Array = NDArray[np.float64]


class InputDistribution(Protocol):
    """What is known of one input quantity."""

    @property
    def estimate(self) -> float:
        """The best estimate of the quantity."""
        ...

    @property
    def degrees_of_freedom(self) -> float:
        """Finite only for Student's t."""
        ...

    def draw(self, generator: np.random.Generator, size: int) -> Array:
        """Draw values.

        Parameters
        ----------
        generator : numpy.random.Generator
        size : int

        Returns
        -------
        ndarray, shape (size,)
        """
        ...


def check(right: bool, message: str, *where: str) -> None:
    """Refuse a distribution that is none.

    Parameters
    ----------
    right : bool
    message : str
    *where : str
        The member at fault.

    Raises
    ------
    ComponentError
        Unless it is right.
    """
    if not right:
        raise ComponentError(message, where=where)


@dataclass(frozen=True)
class Bounded:
    """A quantity between two limits: rectangular, triangular, trapezoidal or arcsine.

    Parameters
    ----------
    shape : str
        One of ``budgets.distributions.SHAPES``, but not ``normal``.
    lower, upper : float
    top_to_base_ratio : float or None
        Of a trapezoid.

    Raises
    ------
    ComponentError
        If the shape is not bounded, or the limits are not in order.

    Notes
    -----
    Source: JCGM 101:2008, 6.4.2 and 6.4.4 to 6.4.6, Table 1 (from memory).
    """

    shape: str
    lower: float
    upper: float
    top_to_base_ratio: float | None = None

    degrees_of_freedom = math.inf

    def __post_init__(self) -> None:
        check_shape(self.shape, self.top_to_base_ratio)
        relative_half_width(self.shape, self.top_to_base_ratio)
        check(
            math.isfinite(self.upper - self.lower) and self.lower < self.upper,
            f"the limits must be finite and in order; got {self.lower} and {self.upper}",
            "lower",
        )

    @property
    def estimate(self) -> float:
        """The middle between the limits."""
        return (self.lower + self.upper) / 2

    @property
    def standard_uncertainty(self) -> float:
        """Half of the width over the relative half-width of the shape."""
        half = (self.upper - self.lower) / 2
        return half / relative_half_width(self.shape, self.top_to_base_ratio)

    def draw(self, generator: np.random.Generator, size: int) -> Array:
        """Draw values; see `InputDistribution`."""
        errors = draws(
            self.shape,
            self.standard_uncertainty,
            size,
            generator,
            top_to_base_ratio=self.top_to_base_ratio,
        )
        return self.estimate + errors


@dataclass(frozen=True)
class CurvilinearTrapezoid:
    """A quantity between limits that are themselves known only within ``plus_or_minus``.

    Parameters
    ----------
    lower, upper : float
    plus_or_minus : float
        How far either limit may be off; less than half of the width between them.

    Raises
    ------
    ComponentError
        If it is not such.

    Notes
    -----
    Both limits move by the same amount in opposite directions. ``u^2 = (b - a)^2/12 + d^2/9``. Source:
    JCGM 101:2008, 6.4.3 (from memory).
    """

    lower: float
    upper: float
    plus_or_minus: float

    degrees_of_freedom = math.inf

    def __post_init__(self) -> None:
        half = (self.upper - self.lower) / 2
        check(math.isfinite(half) and half > 0, "the limits must be finite and in order", "lower")
        check(
            0 < self.plus_or_minus < half,
            f"the limits are known within more than 0 and less than half of the width, {half:g}",
            "plus_or_minus",
        )

    @property
    def estimate(self) -> float:
        """The middle between the limits."""
        return (self.lower + self.upper) / 2

    @property
    def standard_uncertainty(self) -> float:
        """``sqrt((b - a)^2/12 + d^2/9)``."""
        return math.hypot((self.upper - self.lower) / math.sqrt(12), self.plus_or_minus / 3)

    def draw(self, generator: np.random.Generator, size: int) -> Array:
        """Draw values; see `InputDistribution`."""
        half = (self.upper - self.lower) / 2
        # JCGM 101, 6.4.3.4: a limit first, then a value between that limit and its mirror image.
        widths = half + self.plus_or_minus * (2 * generator.random(size) - 1)
        return np.asarray(self.estimate + widths * (2 * generator.random(size) - 1))


@dataclass(frozen=True)
class Normal:
    """A quantity with a best estimate and a standard uncertainty; Student's t with finite degrees of freedom.

    Parameters
    ----------
    estimate, standard_uncertainty : float
    degrees_of_freedom : float
        Finite: the estimate plus u times t, whose standard deviation is ``u sqrt(nu/(nu - 2))``.

    Raises
    ------
    ComponentError
        If the standard uncertainty or the degrees of freedom are not above zero.

    Notes
    -----
    Source: JCGM 101:2008, 6.4.7 and 6.4.9 (from memory).
    """

    estimate: float
    standard_uncertainty: float
    degrees_of_freedom: float = math.inf

    def __post_init__(self) -> None:
        check(math.isfinite(self.estimate), "the estimate must be a finite number", "estimate")
        u = self.standard_uncertainty
        check(
            math.isfinite(u) and u > 0, "the standard uncertainty must be above zero", "standard_uncertainty"
        )
        check(self.degrees_of_freedom > 0, "the degrees of freedom must be above zero", "degrees_of_freedom")

    @classmethod
    def of_indications(cls, values: Sequence[float]) -> Normal:
        """Return what repeated indications say of a quantity.

        Parameters
        ----------
        values : sequence of float
            At least two, not all equal.

        Returns
        -------
        Normal
            Their mean with s/sqrt(n) and n - 1 degrees of freedom.

        Raises
        ------
        ComponentError
            If there are too few, or they do not scatter.

        Notes
        -----
        Source: JCGM 101:2008, 6.4.9.2 (from memory).
        """
        array = np.asarray(values, dtype=np.float64)
        check(array.ndim == 1 and array.size >= 2, "at least two indications are needed", "values")
        return cls(
            float(array.mean()), float(array.std(ddof=1)) / math.sqrt(array.size), float(array.size - 1)
        )

    def draw(self, generator: np.random.Generator, size: int) -> Array:
        """Draw values; see `InputDistribution`."""
        freedom = self.degrees_of_freedom
        return self.estimate + draws(
            "normal", self.standard_uncertainty, size, generator, degrees_of_freedom=freedom
        )


@dataclass(frozen=True)
class Exponential:
    """A quantity that cannot be below zero and of which only a best estimate is known.

    Parameters
    ----------
    estimate : float
        Above zero; it is the standard uncertainty too.

    Raises
    ------
    ComponentError
        If it is not such.

    Notes
    -----
    Source: JCGM 101:2008, 6.4.10 (from memory).
    """

    estimate: float

    degrees_of_freedom = math.inf

    def __post_init__(self) -> None:
        check(math.isfinite(self.estimate) and self.estimate > 0, "it must be above zero", "estimate")

    def draw(self, generator: np.random.Generator, size: int) -> Array:
        """Draw values; see `InputDistribution`."""
        return self.estimate * generator.standard_exponential(size)


@dataclass(frozen=True)
class Counted:
    """The mean number of objects in a sample of fixed size in which so many were counted.

    Parameters
    ----------
    number : int
        From 0 up.

    Raises
    ------
    ComponentError
        If it is below zero.

    Notes
    -----
    A gamma distribution G(q + 1, 1): both the estimate and the variance are q + 1. Source: JCGM 101:2008,
    6.4.11 (from memory).
    """

    number: int

    degrees_of_freedom = math.inf

    def __post_init__(self) -> None:
        check(self.number >= 0, "a number of objects is not below zero", "number")

    @property
    def estimate(self) -> float:
        """The mean of the distribution."""
        return self.number + 1.0

    def draw(self, generator: np.random.Generator, size: int) -> Array:
        """Draw values; see `InputDistribution`."""
        return generator.standard_gamma(self.number + 1.0, size)


@dataclass(frozen=True)
class Sampled:
    """A quantity whose distribution is given by values: data, or the output of another Monte Carlo run.

    Parameters
    ----------
    values : tuple of float
        Each is as probable as any other.

    Raises
    ------
    ComponentError
        If there are fewer than two different ones, or one is not finite.

    Notes
    -----
    Source: JCGM 101:2008, 6.5 (from memory): distributions from previous uncertainty calculations.
    """

    values: tuple[float, ...]

    degrees_of_freedom = math.inf

    def __post_init__(self) -> None:
        check(all(map(math.isfinite, self.values)), "every value must be finite", "values")
        check(len(set(self.values)) >= 2, "at least two different values are needed", "values")

    @property
    def estimate(self) -> float:
        """The mean of the values."""
        return math.fsum(self.values) / len(self.values)

    def draw(self, generator: np.random.Generator, size: int) -> Array:
        """Draw values; see `InputDistribution`."""
        return np.asarray(self.values)[generator.integers(len(self.values), size=size)]
