"""What it cost over a recorded period to run further from the limit than needed."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from budgets.errors import LimitsError
from budgets.money import Money

_SIDES = {"upper": 1.0, "lower": -1.0}


@dataclass(frozen=True)
class Giveaway:
    """What the released lots of a period gave away.

    Parameters
    ----------
    lots : int
        Released lots.
    true_mean : float, unit of the characteristic
        Mean of their estimates less a bias that was left in them.
    needed_true_mean : float, unit of the characteristic
        At the set point that would have been near enough.
    distance : float, unit of the characteristic
        Further from the limit than needed, on average; below 0: nearer.
    value : float
        Of the period.
    value_per_lot : float
    standard_uncertainty : float
        Of the value: of the error that all lots share, and of the mean of the lots' own.
    lots_nearer_than_needed : int
    """

    lots: int
    true_mean: float
    needed_true_mean: float
    distance: float
    value: float
    value_per_lot: float
    standard_uncertainty: float
    lots_nearer_than_needed: int


def giveaway(
    estimates: Sequence[float],
    needed_true_mean: float,
    towards: str,
    money: Money,
    *,
    residual_bias: float = 0.0,
    common_standard_uncertainty: float = 0.0,
    random_standard_uncertainty: float = 0.0,
) -> Giveaway:
    """Return what released lots gave away.

    Parameters
    ----------
    estimates : sequence of float, unit of the characteristic
        One for each released lot, as it was judged.
    needed_true_mean : float, unit of the characteristic
    towards : {"upper", "lower"}
    money : Money
    residual_bias : float, unit of the characteristic
        Estimate less true value, of a bias that was left in the guard band.
    common_standard_uncertainty, random_standard_uncertainty : float, unit of the characteristic
        Of the error that all lots share, and of that of a single lot.

    Returns
    -------
    Giveaway

    Raises
    ------
    LimitsError
        If no lot was released in the period, or a unit closer has no value.

    Notes
    -----
    Against the TRUE mean: reading minus bias, on released quantity only. Own derivation; the uncertainty by
    JCGM 100:2008, 5.1.2 (from memory).

    Examples
    --------
    >>> money = Money(25, 2000, 10.0, 0, 0, 0)
    >>> found = giveaway([2.8, 2.9], 2.95, "upper", money)
    >>> round(found.distance, 3), round(found.value, 2)
    (0.1, 50.0)
    """
    if not estimates:
        raise LimitsError("no lot was released in this period: nothing was given away", where=("first_day",))
    if not money.value_of_lot > 0:
        raise LimitsError("without a value of one unit closer nothing is given away", where=("money",))
    sign = _SIDES[towards]
    true_values = [estimate - residual_bias for estimate in estimates]
    distances = [sign * (needed_true_mean - value) for value in true_values]
    number = len(distances)
    mean = math.fsum(distances) / number
    spread = math.hypot(common_standard_uncertainty, random_standard_uncertainty / math.sqrt(number))
    return Giveaway(
        lots=number,
        true_mean=math.fsum(true_values) / number,
        needed_true_mean=needed_true_mean,
        distance=mean,
        value=money.value_of_lot * number * mean,
        value_per_lot=money.value_of_lot * mean,
        standard_uncertainty=money.value_of_lot * number * spread,
        lots_nearer_than_needed=sum(distance < 0 for distance in distances),
    )
