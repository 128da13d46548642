"""Global risks: what an acceptance interval lets pass, and holds back, over a whole production.

A global risk is a joint probability: a lot does not conform AND is accepted, or conforms AND is not. The
share of nonconforming lots among the accepted ones is another figure, with a name of its own. The common
error of the measurement is one constant for the plant that nobody knows: the risks are means over it, and
beside them stands what they do not exceed in nineteen of twenty plants. Where few plants take nearly all of
the risk, that quantile lies below the mean.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import cast

import numpy as np
from numpy.typing import ArrayLike, NDArray

from budgets.conformity import Tolerance, shifted
from budgets.errors import LimitsError
from budgets.joint_laws import LimitRows
from budgets.measurement_errors import MeasurementErrors
from budgets.production_laws import Production
from budgets.production_priors import ProductionPrior

Array = NDArray[np.float64]


@dataclass(frozen=True)
class GlobalRisks:
    """Risks over a production; arrays of shape (n,), one place for each acceptance interval.

    Parameters
    ----------
    guard_band : ndarray, unit of the characteristic
    lower_acceptance_limit, upper_acceptance_limit : ndarray or None, unit of the characteristic
    global_consumers_risk : ndarray
        Probability that a lot does not conform and is accepted, mean over the common error.
    global_producers_risk : ndarray
        Probability that a lot conforms and is not accepted, mean over the common error.
    global_consumers_risk_quantile, global_producers_risk_quantile : ndarray
        95 % quantile over the common error.
    release_rate : ndarray
        Probability that a lot is accepted.
    conditional_global_consumers_risk, conditional_global_producers_risk : ndarray
        Conditional probabilities: the risks over the rates of acceptance and of no acceptance; NaN where
        that rate is 0.
    nonconforming_share : float
        Probability that a lot does not conform, accepted or not.
    """

    guard_band: Array
    lower_acceptance_limit: Array | None
    upper_acceptance_limit: Array | None
    global_consumers_risk: Array
    global_producers_risk: Array
    global_consumers_risk_quantile: Array
    global_producers_risk_quantile: Array
    release_rate: Array
    conditional_global_consumers_risk: Array
    conditional_global_producers_risk: Array
    nonconforming_share: float


def global_risks(
    prior: ProductionPrior, errors: MeasurementErrors, tolerance: Tolerance, guard_bands: ArrayLike
) -> GlobalRisks:
    """Return the global risks as a curve over the guard band.

    Parameters
    ----------
    prior : ProductionPrior
    errors : MeasurementErrors
    tolerance : Tolerance
    guard_bands : array_like of float, shape (n,), unit of the characteristic
        Ascending; the same one at both limits, beside an uncorrected bias. Below zero: acceptance outside of
        the tolerance interval.

    Returns
    -------
    GlobalRisks

    Raises
    ------
    LimitsError
        If a guard band is not finite, they do not ascend, or leave nothing between two limits.

    Notes
    -----
    Source: JCGM 106:2012, 9.3.2 and 9.5, eq. (17) to (20) (from memory); the common error as a constant of
    the plant, and priors made of readings or of a steered process, are own derivations, no published clause.
    """
    bands = np.atleast_1d(np.asarray(guard_bands, dtype=np.float64))
    if bands.ndim != 1 or not np.isfinite(bands).all() or (np.diff(bands) < 0).any():
        raise LimitsError("guard bands must be finite and ascend", where=("guard_bands",))
    lower, upper = shifted(tolerance, errors.bias)
    accepted = (None if lower is None else lower + bands, None if upper is None else upper - bands)
    return risks_of_acceptance(prior, errors, tolerance, *accepted, guard_bands=bands)


def risks_of_acceptance(
    prior: ProductionPrior,
    errors: MeasurementErrors,
    tolerance: Tolerance,
    lower: ArrayLike | None,
    upper: ArrayLike | None,
    *,
    guard_bands: Array | None = None,
) -> GlobalRisks:
    """Return the global risks of acceptance intervals each of which lies in the one before.

    Parameters
    ----------
    prior : ProductionPrior
    errors : MeasurementErrors
    tolerance : Tolerance
    lower, upper : array_like of float, shape (n,), or None, unit of the characteristic
        Acceptance limits; None where there is no tolerance limit.
    guard_bands : ndarray or None
        Shown beside; None: the distance at the upper limit, or else the lower one.

    Returns
    -------
    GlobalRisks

    Raises
    ------
    LimitsError
        If the acceptance limits of two-sided intervals cross.
    """
    production = Production(prior, errors, tolerance)
    rows = production.rows(lower, upper)
    mean = production.mean(rows)
    consumers, producers = production.quantiles(rows, mean)
    return GlobalRisks(
        guard_band=_bands(tolerance, rows) if guard_bands is None else guard_bands,
        lower_acceptance_limit=rows.lower_acceptance,
        upper_acceptance_limit=rows.upper_acceptance,
        global_consumers_risk=mean.nonconforming_accepted,
        global_producers_risk=mean.conforming_not_accepted,
        global_consumers_risk_quantile=consumers,
        global_producers_risk_quantile=producers,
        release_rate=mean.accepted,
        conditional_global_consumers_risk=_share(mean.nonconforming_accepted, mean.accepted),
        conditional_global_producers_risk=_share(mean.conforming_not_accepted, mean.not_accepted),
        nonconforming_share=production.nonconforming_share(),
    )


def mean_consumers_risk(
    prior: ProductionPrior,
    errors: MeasurementErrors,
    tolerance: Tolerance,
    lower: float | None,
    upper: float | None,
) -> tuple[float, float]:
    """Return the global consumer's risk of one acceptance interval, and the rate of acceptance.

    Parameters
    ----------
    prior, errors, tolerance
        As in `global_risks`.
    lower, upper : float or None, unit of the characteristic
        Acceptance limits.

    Returns
    -------
    tuple of float
        Means over the common error.
    """
    production = Production(prior, errors, tolerance)
    rates = production.mean(production.rows(lower, upper))
    return float(rates.nonconforming_accepted[0]), float(rates.accepted[0])


def nonconforming_share(prior: ProductionPrior, errors: MeasurementErrors, tolerance: Tolerance) -> float:
    """Return the probability that a lot does not conform, accepted or not.

    Parameters
    ----------
    prior, errors, tolerance
        As in `global_risks`; the errors count where the prior is known from readings.

    Returns
    -------
    float
    """
    return Production(prior, errors, tolerance).nonconforming_share()


def _share(part: Array, whole: Array) -> Array:
    share: Array = np.divide(part, whole, out=np.full(part.shape, np.nan), where=whole > 0)
    return share


def _bands(tolerance: Tolerance, rows: LimitRows) -> Array:
    if rows.upper_acceptance is not None:
        return cast(float, tolerance.upper) - rows.upper_acceptance
    assert rows.lower_acceptance is not None  # a tolerance has at least one limit
    return rows.lower_acceptance - cast(float, tolerance.lower)
