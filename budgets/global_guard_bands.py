"""The guard band that holds the global consumer's risk of a production."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import NoReturn

from scipy.optimize import brentq

from budgets.conformity import Tolerance, shifted
from budgets.errors import LimitsError
from budgets.global_risks import mean_consumers_risk, nonconforming_share
from budgets.measurement_errors import MeasurementErrors
from budgets.production_priors import ProductionPrior

LEAST_RELEASE_RATE = 0.01
"""A guard band that releases less proves nothing but that the production does not fit. Own choice."""

_FULL_PRECISION = 4 * 2.220446049250313e-16


@dataclass(frozen=True)
class GlobalGuardBand:
    """The smallest guard band that holds a global consumer's risk.

    Parameters
    ----------
    guard_band : float, unit of the characteristic
        The same at both limits, beside an uncorrected bias; not below zero.
    global_consumers_risk : float
        With it; smaller than the largest one where no guard band is needed.
    release_rate : float
    """

    guard_band: float
    global_consumers_risk: float
    release_rate: float


def global_guard_band(
    prior: ProductionPrior, errors: MeasurementErrors, tolerance: Tolerance, largest_risk: float
) -> GlobalGuardBand:
    """Return the smallest guard band, from zero up, that holds the global consumer's risk.

    Parameters
    ----------
    prior : ProductionPrior
    errors : MeasurementErrors
    tolerance : Tolerance
    largest_risk : float
        Largest probability that a lot does not conform and is accepted; mean over the common error.

    Returns
    -------
    GlobalGuardBand

    Raises
    ------
    LimitsError
        If no guard band holds that risk and still releases one lot in a hundred.

    Notes
    -----
    The risk falls steadily as the guard band grows, so the root is the only one. Source: JCGM 106:2012, 9.5.3
    and 9.5.4 (from memory).
    """
    if not 0 < largest_risk < 0.5:
        raise LimitsError("largest_risk must lie between 0 and 0.5", where=("largest_risk",))
    lower, upper = shifted(tolerance, errors.bias)
    width = math.inf if lower is None or upper is None else upper - lower
    if width <= 0:
        raise LimitsError("the uncorrected bias alone uses up the tolerance interval", where=("bias",))

    def risk_and_rate(band: float) -> tuple[float, float]:
        return mean_consumers_risk(
            prior,
            errors,
            tolerance,
            None if lower is None else lower + min(band, width / 2),
            None if upper is None else upper - min(band, width / 2),
        )

    def excess(band: float) -> float:
        return risk_and_rate(band)[0] - largest_risk

    band = 0.0
    if excess(0.0) > 0:
        start, end = _bracket(excess, errors, tolerance, width)
        band = float(brentq(excess, start, end, xtol=_FULL_PRECISION * end, rtol=_FULL_PRECISION))
    risk, rate = risk_and_rate(band)
    if rate < LEAST_RELEASE_RATE:
        _refuse(prior, errors, tolerance, largest_risk, band)
    return GlobalGuardBand(band, risk, rate)


def _bracket(
    excess: Callable[[float], float], errors: MeasurementErrors, tolerance: Tolerance, width: float
) -> tuple[float, float]:
    """Return guard bands below and above the root; at the latest one that accepts nothing is above it."""
    limits = [limit for limit in (tolerance.lower, tolerance.upper) if limit is not None]
    start, end = 0.0, min(width / 2, max(errors.whole.at(limit) for limit in limits))
    while excess(end) > 0:
        start, end = end, min(width / 2, 2 * end)
    return start, end


def _refuse(
    prior: ProductionPrior, errors: MeasurementErrors, tolerance: Tolerance, wanted: float, band: float
) -> NoReturn:
    share = nonconforming_share(prior, errors, tolerance)
    raise LimitsError(
        f"a global consumer's risk of {wanted:g} is out of reach: the guard band of {band:.4g} that holds "
        f"it releases less than {100 * LEAST_RELEASE_RATE:g} % of the lots; by the prior (mean "
        f"{prior.mean:.6g}, standard deviation {prior.standard_deviation:.4g}) {100 * share:.1f} % of all "
        "lots do not conform. Move the process, or agree on other limits",
        where=("largest_risk",),
    )
