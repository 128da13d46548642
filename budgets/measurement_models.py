"""The measurement model: an expression over named quantities, its value and its derivatives."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property
from itertools import combinations
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from budgets.errors import BudgetsError, ModelError, UnitsError, raise_collected
from budgets.expression_arrays import array_slopes, array_values
from budgets.expression_gaps import refuse_gaps
from budgets.expression_values import exact_slopes, exact_values
from budgets.expressions import Expression, is_name, parse
from budgets.model_dimensions import check_dimensions
from budgets.taylor import taylor_polynomial

SOURCES = ("reading", "given")
MOST_QUANTITIES = 60


@dataclass(frozen=True)
class Quantity:
    """An input quantity of a measurement model.

    Parameters
    ----------
    name : str
        As the expression writes it: letters, digits, ``_``.
    unit : str or None
        None where units are not checked; then no quantity of the model may have one.
    source : {"reading", "given"}
        ``reading``: its estimate comes with every reading and is averaged. ``given``: it stands here.
    estimate : float or None, in ``unit``
        Of a given quantity.

    Raises
    ------
    ModelError
        If the name, the source or the estimate is not such.
    """

    name: str
    unit: str | None = None
    source: str = "reading"
    estimate: float | None = None

    def __post_init__(self) -> None:
        if not is_name(self.name):
            raise ModelError(
                f"{self.name[:40]!r} cannot name a quantity: letters, digits, _ and - are allowed, and "
                "no name of a function",
                where=("name",),
            )
        if self.source not in SOURCES:
            raise ModelError(f"a quantity is {' or '.join(SOURCES)}, not {self.source!r}", where=("source",))
        if (self.source == "given") != (self.estimate is not None):
            raise ModelError(
                f"{self.name}: a given quantity has an estimate, a quantity that is read has none",
                where=("estimate",),
            )
        if self.estimate is not None and not math.isfinite(self.estimate):
            raise ModelError(f"{self.name}: the estimate must be a finite number", where=("estimate",))


@dataclass(frozen=True)
class SecondOrder:
    """Terms of second order of the law of propagation.

    Parameters
    ----------
    variance : float
        To be added to the variance of first order; may be negative.
    shift_of_mean : float
        By how much the mean of the measurand lies above the value of the model at the estimates.
    """

    variance: float
    shift_of_mean: float


@dataclass(frozen=True)
class MeasurementModel:
    """A measurement model, parsed and checked once.

    Parameters
    ----------
    expression : str
    quantities : tuple of Quantity
        Exactly those that the expression names.
    unit : str or None
        Of the measurand.

    Raises
    ------
    ModelError, UnitsError
        With paths such as ``("expression",)`` or ``("quantities", 2)``.

    Notes
    -----
    Source: JCGM 100:2008, 4.1 (from memory).

    Examples
    --------
    >>> model = MeasurementModel(
    ...     "protein / (1 - moisture/100)", (Quantity("protein", "%"), Quantity("moisture", "%")), "%"
    ... )
    >>> model.value({"protein": 24.0, "moisture": 4.0})
    25.0
    >>> model.sensitivity_coefficients({"protein": 24.0, "moisture": 4.0})["protein"]
    1.0416666666666667
    """

    expression: str
    quantities: tuple[Quantity, ...]
    unit: str | None = None

    def __post_init__(self) -> None:
        names = self.names
        faults: list[BudgetsError] = [
            ModelError(f"two quantities are called {name!r}", where=("quantities", index, "name"))
            for index, name in enumerate(names)
            if name in names[:index]
        ]
        if len(names) > MOST_QUANTITIES:
            faults.append(ModelError(f"more than {MOST_QUANTITIES} quantities", where=("quantities",)))
        raise_collected(faults)
        used = self._parsed.names
        raise_collected(
            [
                ModelError(f"the expression does not use {name!r}", where=("quantities", index, "name"))
                for index, name in enumerate(names)
                if name not in used
            ]
        )
        self._check_units()

    def _check_units(self) -> None:
        given = [quantity.unit for quantity in self.quantities]
        units = {quantity.name: quantity.unit for quantity in self.quantities if quantity.unit is not None}
        if self.unit is None and not units:
            return
        if self.unit is None or None in given:
            raise UnitsError(
                "either every quantity and the measurand state a unit, or none of them does",
                where=("quantities",),
            )
        check_dimensions(self._parsed.steps, units, self.unit)

    @cached_property
    def _parsed(self) -> Expression:
        return parse(self.expression, self.names)

    @cached_property
    def names(self) -> tuple[str, ...]:
        """Names of the quantities, in their order."""
        return tuple(quantity.name for quantity in self.quantities)

    @cached_property
    def given(self) -> dict[str, float]:
        """Estimates of the given quantities."""
        return {item.name: item.estimate for item in self.quantities if item.estimate is not None}

    @cached_property
    def read(self) -> tuple[str, ...]:
        """Names of the quantities that every reading brings."""
        return tuple(item.name for item in self.quantities if item.source == "reading")

    def estimates(self, read: Mapping[str, float]) -> dict[str, float]:
        """Return the estimates of all quantities, those read put beside the given ones.

        Parameters
        ----------
        read : mapping of str to float
            The quantities that are read; a given one may be named to ask "what if".

        Returns
        -------
        dict of str to float

        Raises
        ------
        ModelError
            If one is missing, unknown or not finite, with the path ``("estimates", name)``.
        """
        merged = {**self.given, **read}
        faults: list[BudgetsError] = [
            ModelError(f"the estimate of {name} is missing", where=("estimates", name))
            for name in self.names
            if name not in merged
        ]
        faults += [
            ModelError(f"{name!r} is no quantity of the model", where=("estimates", name))
            for name in read
            if name not in self.names
        ]
        faults += [
            ModelError(f"the estimate of {name} must be a finite number", where=("estimates", name))
            for name, value in merged.items()
            if not math.isfinite(value)
        ]
        raise_collected(faults)
        return merged

    def value(self, estimates: Mapping[str, float]) -> float:
        """Return the estimate of the measurand.

        Parameters
        ----------
        estimates : mapping of str to float
            As in `estimates`.

        Returns
        -------
        float

        Raises
        ------
        ModelError
            If the model has no value there.

        Notes
        -----
        Source: JCGM 100:2008, 4.1.4, eq. (2) (from memory). Computed with 40 digits, rounded once.
        """
        return _double(exact_values(self._parsed.steps, self.estimates(estimates))[-1])

    def linearised(self, estimates: Mapping[str, float]) -> tuple[float, dict[str, float]]:
        """Return value and sensitivity coefficients together.

        Parameters
        ----------
        estimates : mapping of str to float

        Returns
        -------
        tuple
            Value, and the partial derivative by every quantity.

        Raises
        ------
        ModelError
            If the model has no value or no derivative there.

        Notes
        -----
        Source: JCGM 100:2008, 5.1.3 (from memory). By the derivative rules of the parsed expression, with 40
        digits, so that nothing is lost where large terms cancel.
        """
        values = exact_values(self._parsed.steps, self.estimates(estimates))
        slopes = exact_slopes(self._parsed.steps, values)
        return _double(values[-1]), {name: _double(slopes[name]) for name in self.names}

    def sensitivity_coefficients(self, estimates: Mapping[str, float]) -> dict[str, float]:
        """Return the sensitivity coefficients; see `linearised`.

        Parameters
        ----------
        estimates : mapping of str to float

        Returns
        -------
        dict of str to float
            Signed, one for every quantity.

        Raises
        ------
        ModelError
            As in `linearised`.
        """
        return self.linearised(estimates)[1]

    def uncertain_value(self, inputs: Mapping[str, Any]) -> Any:
        """Return the value for numbers of the package `uncertainties`, correlated or not.

        Parameters
        ----------
        inputs : mapping of str to UFloat
            Every quantity; plain numbers may stand among them.

        Returns
        -------
        UFloat
            An independent second way to the sensitivity coefficients, by automatic differentiation.

        Raises
        ------
        ModelError
            If the model has no value there.
        """
        from budgets.automatic_differentiation import uncertain_value

        return uncertain_value(self._parsed.steps, {**self.given, **inputs})

    def values(self, estimates: Mapping[str, ArrayLike]) -> NDArray[np.float64]:
        """Return the estimates of the measurand for arrays of estimates.

        Parameters
        ----------
        estimates : mapping of str to array_like
            Arrays that broadcast against each other; given quantities may be left out.

        Returns
        -------
        ndarray

        Raises
        ------
        ModelError
            If a quantity is missing or unknown, or the model has no value somewhere.
        """
        return self.linearised_many(estimates, slopes=False)[0]

    def linearised_many(
        self, estimates: Mapping[str, ArrayLike], *, slopes: bool = True
    ) -> tuple[NDArray[np.float64], dict[str, NDArray[np.float64]]]:
        """Return values and sensitivity coefficients for arrays of estimates, in double precision.

        Parameters
        ----------
        estimates : mapping of str to array_like
        slopes : bool
            False leaves the derivatives out.

        Returns
        -------
        tuple
            Values, and the derivatives by every quantity; all of one shape.

        Raises
        ------
        ModelError
            As in `values`, or if there is no derivative somewhere.
        """
        self.estimates(dict.fromkeys(estimates, 0.0))  # names only
        arrays = {
            name: np.asarray(value, dtype=np.float64) for name, value in {**self.given, **estimates}.items()
        }
        for name, array in arrays.items():
            if not np.isfinite(array).all():
                raise ModelError(f"every estimate of {name} must be finite", where=("estimates", name))
        shape = np.broadcast_shapes(*(array.shape for array in arrays.values()))
        steps = array_values(self._parsed.steps, arrays)
        value = np.broadcast_to(steps[-1], shape)
        if not slopes:
            return value, {}
        found = array_slopes(self._parsed.steps, steps)
        return value, {name: np.broadcast_to(found[name], shape) for name in self.names}

    def refuse_gaps(self, ranges: Mapping[str, tuple[float, float]]) -> None:
        """Refuse the model where it may have no value somewhere in a box; see `expression_gaps`.

        Parameters
        ----------
        ranges : mapping of str to tuple of float
            Of every quantity that is read.

        Raises
        ------
        ModelError
            If it has a pole or a gap in the box, or cannot be shown to have none.
        """
        if ranges:
            refuse_gaps(self._parsed.steps, ranges, self.given)

    def second_order(
        self,
        estimates: Mapping[str, float],
        variances: Mapping[str, float],
        *,
        fourth_moments: Mapping[str, float] | None = None,
    ) -> SecondOrder:
        """Return the terms of second order for independent inputs with symmetric distributions.

        Parameters
        ----------
        estimates : mapping of str to float
        variances : mapping of str to float
            Of the quantities; those left out are taken as known.
        fourth_moments : mapping of str to float or None
            Fourth central moments; 3 u^4, that of the normal distribution, where one is left out.

        Returns
        -------
        SecondOrder

        Raises
        ------
        ModelError
            If the model has no such derivatives there.

        Notes
        -----
        Source: JCGM 100:2008, 5.1.2 note (from memory):
        ``sum_ij [f_ij^2/2 + f_i f_ijj] u_i^2 u_j^2``. For an input that is not normal its own term is
        ``f_ii^2/4 (mu_4 - u^4) + f_i f_iii mu_4/3`` (the third moment of a symmetric distribution is 0).
        """
        full = self.estimates(estimates)
        moments = {name: 3 * variances[name] ** 2 for name in variances} | dict(fourth_moments or {})
        uncertain = [name for name in self.names if variances.get(name, 0.0) > 0]
        variance, shift = 0.0, 0.0
        slopes: dict[str, float] = {}
        for name in uncertain:
            own = taylor_polynomial(self._parsed.steps, full, name, None)
            first, second, third = (_double(own.get((k, 0), 0)) * math.factorial(k) for k in (1, 2, 3))
            slopes[name] = first
            u2, mu4 = variances[name], moments[name]
            variance += second**2 / 4 * (mu4 - u2**2) + first * third * mu4 / 3
            shift += second * u2 / 2
        for one, other in combinations(uncertain, 2):
            both = taylor_polynomial(self._parsed.steps, full, one, other)
            mixed = _double(both.get((1, 1), 0))
            f_ijj, f_jii = 2 * _double(both.get((1, 2), 0)), 2 * _double(both.get((2, 1), 0))
            # i, j and j, i: f_ij^2/2 twice, and both third derivatives.
            term = mixed**2 + slopes[one] * f_ijj + slopes[other] * f_jii
            variance += term * variances[one] * variances[other]
        return SecondOrder(variance, shift)


def _double(value: Any) -> float:
    number = float(value)
    if not math.isfinite(number):
        raise ModelError("the value of the model is too large at the estimates", where=("estimates",))
    return number
