"""Conformity: tolerance limits and the conformance probability of an estimate.

Every probability is a tail of the distribution of the standardised error (see `budgets.error_distributions`):
Student's t on the scale of the combined standard uncertainty, or Monte Carlo quantiles. Tails are computed as
tails, never as one minus the rest.

An uncorrected bias b (mean of analyzer minus reference) counts in its harmful direction only: the upper
tail is taken at ``estimate + max(0, -b)``, the lower one at ``estimate - max(0, b)``.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from budgets.error_distributions import ErrorDistribution, Real
from budgets.errors import LimitsError


@dataclass(frozen=True)
class StatedLimits:
    """The limits that a specification states, where estimates are rounded before they are compared.

    Parameters
    ----------
    lower, upper : float or None, unit of the characteristic
    lower_inclusive, upper_inclusive : bool
        Whether a rounded estimate exactly at the limit is inside.
    decimals : int
        Decimal places that estimates are rounded to.
    """

    lower: float | None
    upper: float | None
    lower_inclusive: bool
    upper_inclusive: bool
    decimals: int


@dataclass(frozen=True)
class Tolerance:
    """Tolerance limits: the specification of the true value.

    Parameters
    ----------
    lower, upper : float or None, unit of the characteristic
        None: no such limit.
    lower_inclusive, upper_inclusive : bool
        Whether an estimate exactly at the limit is inside.
    stated : StatedLimits or None
        Where estimates are rounded before they are compared: what was stated. The limits above are then the
        effective ones, for estimates that are not rounded (see `budgets.rounded_comparison`).

    Raises
    ------
    LimitsError
        If there is no limit at all, a limit is not finite, or the lower one is not below the upper one.

    Notes
    -----
    Source: JCGM 106:2012, 3.3.3 to 3.3.5 (from memory).
    """

    lower: float | None
    upper: float | None
    lower_inclusive: bool = True
    upper_inclusive: bool = True
    stated: StatedLimits | None = None

    def __post_init__(self) -> None:
        if self.lower is None and self.upper is None:
            raise LimitsError("there is no tolerance limit at all", where=("upper_tolerance_limit",))
        for name, limit in (("lower", self.lower), ("upper", self.upper)):
            if limit is not None and not math.isfinite(limit):
                raise LimitsError(
                    f"the {name} tolerance limit must be a finite number", where=(f"{name}_tolerance_limit",)
                )
        if self.lower is not None and self.upper is not None and not self.lower < self.upper:
            raise LimitsError(
                f"the tolerance limits are the wrong way round: the lower one {self.lower:g} is not below "
                f"the upper one {self.upper:g}",
                where=("lower_tolerance_limit",),
            )

    @property
    def stated_ends(self) -> tuple[float | None, float | None]:
        """The lower and upper limit as the specification states them."""
        return (self.lower, self.upper) if self.stated is None else (self.stated.lower, self.stated.upper)

    def holds(self, estimate: float) -> bool:
        """Say whether an estimate is within tolerance, each limit inclusive or not as it says."""
        if self.upper is not None and (
            estimate > self.upper or (estimate == self.upper and not self.upper_inclusive)
        ):
            return False
        return not (
            self.lower is not None
            and (estimate < self.lower or (estimate == self.lower and not self.lower_inclusive))
        )


def shifted(tolerance: Tolerance, bias: float) -> tuple[float | None, float | None]:
    """Return the tolerance limits moved inward by an uncorrected bias, each by its harmful direction.

    Parameters
    ----------
    tolerance : Tolerance
    bias : float, unit of the characteristic
        Mean of (analyzer - reference) that was not corrected; 0 when it was.

    Returns
    -------
    tuple of float or None
        Lower and upper limit for the reading. With a large bias they may cross.
    """
    lower = None if tolerance.lower is None else tolerance.lower + max(0.0, bias)
    upper = None if tolerance.upper is None else tolerance.upper - max(0.0, -bias)
    return lower, upper


def standardised_limits(
    estimate: Real,
    standard_uncertainty: float | NDArray[np.float64],
    tolerance: Tolerance,
    *,
    bias: float = 0.0,
) -> tuple[Real | None, Real | None]:
    """Return the errors, in standard uncertainties, beyond which the true value is out of tolerance.

    Parameters
    ----------
    estimate, standard_uncertainty, tolerance, bias
        As in `tails`.

    Returns
    -------
    tuple
        ``(T_L - y)/u`` and ``(T_U - y)/u``, with the limits moved by an uncorrected bias; None where there is
        no limit.
    """
    lower, upper = shifted(tolerance, bias)
    below: Any = None if lower is None else (lower - estimate) / standard_uncertainty
    above: Any = None if upper is None else (upper - estimate) / standard_uncertainty
    return below, above


def tails(
    estimate: Real,
    standard_uncertainty: float | NDArray[np.float64],
    distribution: ErrorDistribution,
    tolerance: Tolerance,
    *,
    bias: float = 0.0,
) -> tuple[Real, Real]:
    """Return the probabilities that the true value lies below and above the tolerance interval.

    Parameters
    ----------
    estimate : float or ndarray, unit of the characteristic
    standard_uncertainty : float or ndarray, unit of the characteristic
    distribution : ErrorDistribution
        Of (true value - estimate)/u.
    tolerance : Tolerance
    bias : float, unit of the characteristic
        Uncorrected bias; 0 when it was corrected.

    Returns
    -------
    tuple
        Risk below, risk above; 0 where there is no limit.

    Notes
    -----
    Source: JCGM 106:2012, 7.2 to 7.4 (from memory), with t of the effective degrees of freedom.
    """
    lower, upper = standardised_limits(estimate, standard_uncertainty, tolerance, bias=bias)
    nothing = estimate * 0.0
    return (
        nothing if lower is None else distribution.lower_tail(lower),
        nothing if upper is None else distribution.upper_tail(upper),
    )


def conformance_probability(
    estimate: Real,
    standard_uncertainty: float | NDArray[np.float64],
    distribution: ErrorDistribution,
    tolerance: Tolerance,
    *,
    bias: float = 0.0,
) -> Real:
    """Return the probability that the true value is within tolerance.

    Parameters
    ----------
    estimate, standard_uncertainty, distribution, tolerance, bias
        As in `tails`.

    Returns
    -------
    float or ndarray
        Keeps its relative digits also where it is small. Not below 0: with an uncorrected bias the two
        limits may cross.

    Notes
    -----
    Source: JCGM 106:2012, 7.4, eq. (10) (from memory).

    Examples
    --------
    >>> from budgets.error_distributions import StudentT
    >>> pc = conformance_probability(13.6, 1.8, StudentT(math.inf), Tolerance(12.5, 16.3))
    >>> round(float(pc), 2)
    0.66
    """
    lower, upper = standardised_limits(estimate, standard_uncertainty, tolerance, bias=bias)
    return distribution.within(lower, upper)


def measurement_capability_index(tolerance: Tolerance, standard_uncertainty: float) -> float | None:
    """Return the width of the tolerance interval over four standard uncertainties.

    Parameters
    ----------
    tolerance : Tolerance
    standard_uncertainty : float, unit of the characteristic

    Returns
    -------
    float or None
        None when there is one limit only: the index is not defined then.

    Notes
    -----
    Source: JCGM 106:2012, 7.6.3, eq. (15) (from memory).

    Examples
    --------
    >>> measurement_capability_index(Tolerance(2.0, 4.0), 0.1)
    5.0
    """
    if tolerance.lower is None or tolerance.upper is None:
        return None
    return (tolerance.upper - tolerance.lower) / (4 * standard_uncertainty)
