"""Units: the only module that knows pint.

A unit is written as products and quotients of unit names, each with an optional whole power and an
optional leading number: ``%``, ``g/100 g``, ``mg/kg``, ``degC``. Conversions are computed in decimal
arithmetic from the shortest digits of a value, so that 31.4 g/kg is the very double 3.14 in % and not one of
its neighbours: a limit and a reading that are equal in print stay equal.
"""

from __future__ import annotations

import re
from dataclasses import dataclass, field
from decimal import Decimal
from functools import cache, lru_cache
from typing import TYPE_CHECKING, Any

from budgets.errors import UnitsError

if TYPE_CHECKING:
    import pint

_FACTOR = re.compile(
    r"\s*(?P<operator>[*/·]?)\s*(?:(?P<number>[1-9]\d{0,5})\s*)?(?P<name>%|[A-Za-z\u00b5\u03bc\u00b0\u03a9_]+)"
    r"(?:\s*(?:\^|\*\*)\s*(?P<power>-?[1-9]))?\s*"
)
_LONGEST = 40


@dataclass(frozen=True)
class Conversion:
    """From one unit to another: ``value * factor + offset``.

    Parameters
    ----------
    factor, offset : float
        For showing; the exact ones are used.
    exact_factor, exact_offset : Decimal
    """

    factor: float
    offset: float
    exact_factor: Decimal = field(repr=False)
    exact_offset: Decimal = field(repr=False)

    def __call__(self, value: float) -> float:
        """Return the value in the other unit."""
        return float(_decimal(value) * self.exact_factor + self.exact_offset)

    def of_difference(self, value: float) -> float:
        """Return a difference of two values (an uncertainty, a bias) in the other unit: no offset."""
        return float(_decimal(value) * self.exact_factor)


def _decimal(value: float) -> Decimal:
    return Decimal(repr(float(value)))


@dataclass(frozen=True)
class _Unit:
    """A unit as ``scale`` times what pint knows."""

    scale: Decimal
    unit: Any


@cache
def _registry() -> pint.UnitRegistry[Any]:
    # Made when first needed: it takes a good part of a second.
    import pint

    return pint.UnitRegistry(non_int_type=Decimal)


def _single(name: str) -> Any:
    """Return what pint knows under one name, or None; its errors are of many classes."""
    try:
        return _registry().Unit(name)
    except Exception:
        return None


def _has_offset(unit: Any) -> bool:
    return bool(_registry().Quantity(Decimal(0), unit).to_base_units().magnitude != 0)


@lru_cache(maxsize=256)
def _parsed(text: str) -> _Unit:
    factors = list(_FACTOR.finditer(text))
    # The factors must cover the text without a gap, and only the first stands without an operator.
    whole = "".join(match.group() for match in factors) == text and len(text) <= _LONGEST
    if (
        not factors
        or not whole
        or any(bool(match["operator"]) == (i == 0) for i, match in enumerate(factors))
    ):
        raise UnitsError(f"{text!r} is no unit that is known here")
    scale, unit = Decimal(1), _registry().Unit("dimensionless")
    for match in factors:
        single = _single(match["name"])
        if single is None:
            raise UnitsError(f"{text!r} is no unit that is known here")
        if _has_offset(single):
            if match.group().strip() != text.strip():
                raise UnitsError(f"{text!r}: a temperature scale with an offset cannot be part of a product")
            return _Unit(Decimal(1), single)
        # '/' divides by the whole factor behind it: g/100 g is one hundredth.
        power = int(match["power"] or 1) * (-1 if match["operator"] == "/" else 1)
        number = Decimal(match["number"] or 1)
        scale = scale / number if match["operator"] == "/" else scale * number
        unit = unit * single**power
    return _Unit(scale, unit)


@dataclass(frozen=True)
class Dimension:
    """What a unit measures.

    Parameters
    ----------
    exponents : tuple of (str, float)
        Base dimensions with their powers, sorted; empty for plain numbers and ratios.
    scale : float
        Size of the unit in base units: 0.01 for ``%``.
    has_offset : bool
        Whether its zero is not that of the base unit (``degC``).
    """

    exponents: tuple[tuple[str, float], ...]
    scale: float
    has_offset: bool


@lru_cache(maxsize=256)
def dimension(unit: str) -> Dimension:
    """Return what a unit measures.

    Parameters
    ----------
    unit : str

    Returns
    -------
    Dimension

    Raises
    ------
    UnitsError
        If the unit is unknown.

    Examples
    --------
    >>> dimension("g/100 g")
    Dimension(exponents=(), scale=0.01, has_offset=False)
    """
    parsed = _parsed(unit)
    quantity = _registry().Quantity
    base = quantity(Decimal(1), parsed.unit).to_base_units().magnitude
    zero = quantity(Decimal(0), parsed.unit).to_base_units().magnitude
    exponents = sorted((name, float(power)) for name, power in parsed.unit.dimensionality.items())
    scale = float((Decimal(base) - Decimal(zero)) * parsed.scale)
    return Dimension(tuple(exponents), scale, bool(zero != 0))


@lru_cache(maxsize=1024)
def conversion(from_unit: str, to_unit: str) -> Conversion:
    """Return how a value is converted from one unit to another.

    Parameters
    ----------
    from_unit, to_unit : str

    Returns
    -------
    Conversion

    Raises
    ------
    UnitsError
        If a unit is unknown or the two have different dimensions.

    Examples
    --------
    >>> conversion("g/kg", "%")
    Conversion(factor=0.1, offset=0.0)
    """
    start, end = _parsed(from_unit), _parsed(to_unit)
    import pint

    quantity = _registry().Quantity
    try:
        at_zero = quantity(Decimal(0), start.unit).to(end.unit).magnitude
        at_one = quantity(Decimal(1), start.unit).to(end.unit).magnitude
    except pint.DimensionalityError as error:
        raise UnitsError(f"{from_unit} cannot be converted to {to_unit}") from error
    factor = (Decimal(at_one) - Decimal(at_zero)) * start.scale / end.scale
    return Conversion(float(factor), float(at_zero), factor, Decimal(at_zero))


def convert(value: float, from_unit: str, to_unit: str) -> float:
    """Return a value in another unit.

    Parameters
    ----------
    value : float, in ``from_unit``
    from_unit, to_unit : str

    Returns
    -------
    float, in ``to_unit``

    Raises
    ------
    UnitsError
        As in `conversion`.

    Examples
    --------
    >>> convert(31.5, "g/kg", "g/100 g")
    3.15
    """
    return conversion(from_unit, to_unit)(value)
