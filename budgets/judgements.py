"""Judgements: the outcome of an estimate by where it lies, and its probabilities, one by one or in arrays."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtr

from budgets.conformity import Tolerance, conformance_probability, shifted
from budgets.distribution_tables import DistributionTable
from budgets.error_distributions import ErrorDistribution, StudentT

RELEASE, HOLD, REJECT = 0, 1, 2
OUTCOMES: tuple[str, ...] = ("release", "hold", "reject")

Ends = tuple[float | None, float | None]
Estimates = NDArray[np.float64]


@dataclass(frozen=True)
class Judgement:
    """The verdict on one estimate, with the exact probabilities that are recorded."""

    outcome: str
    conformance_probability: float
    risk_below: float
    risk_above: float
    specific_consumers_risk: float
    combined_standard_uncertainty: float | None = None


@dataclass(frozen=True)
class Judgements:
    """Verdicts on many estimates.

    Parameters
    ----------
    outcomes : ndarray of int8, shape (n,)
        0 release, 1 hold, 2 reject.
    conformance_probability : ndarray of float64, shape (n,)
    """

    outcomes: NDArray[np.int8]
    conformance_probability: NDArray[np.float64]


@dataclass(frozen=True)
class Zones:
    """Where an estimate is released, held or rejected.

    Parameters
    ----------
    tolerance : Tolerance
        What is outside of it is never released.
    acceptance : tuple of float or None, unit of the characteristic
        An estimate exactly at an acceptance limit is accepted.
    rejection : tuple of float or None, or None
        Under guarded rejection: only an estimate beyond these is rejected. None: all that is outside of
        tolerance is.

    Notes
    -----
    Source: JCGM 106:2012, 7.2 to 7.4 and 8.3 (from memory).
    """

    tolerance: Tolerance
    acceptance: Ends
    rejection: Ends | None

    def of(self, estimate: float) -> int:
        """Return the outcome of one estimate.

        Parameters
        ----------
        estimate : float, unit of the characteristic

        Returns
        -------
        int
            An index into ``OUTCOMES``.
        """
        inside = self.tolerance.holds(estimate)
        if self.rejection is None:
            if not inside:
                return REJECT
        else:
            below, above = self.rejection
            if (above is not None and estimate > above) or (below is not None and estimate < below):
                return REJECT
        lower, upper = self.acceptance
        accepted = (upper is None or estimate <= upper) and (lower is None or estimate >= lower)
        return RELEASE if accepted and inside else HOLD

    def fill(self, estimates: Estimates, outcomes: NDArray[np.int8]) -> None:
        """Write the outcomes of many estimates.

        Parameters
        ----------
        estimates : ndarray of float64, shape (n,), unit of the characteristic
        outcomes : ndarray of int8, shape (n,)
            Overwritten.
        """
        tolerance, (lower, upper) = self.tolerance, self.acceptance
        outside = np.zeros(estimates.shape, dtype=bool)
        held = np.zeros(estimates.shape, dtype=bool)
        if tolerance.upper is not None and upper is not None:
            beyond = np.greater if tolerance.upper_inclusive else np.greater_equal
            outside |= beyond(estimates, tolerance.upper)
            held |= estimates > upper
        if tolerance.lower is not None and lower is not None:
            short = np.less if tolerance.lower_inclusive else np.less_equal
            outside |= short(estimates, tolerance.lower)
            held |= estimates < lower
        if self.rejection is not None:
            held |= outside
            outside[:] = False
            below, above = self.rejection
            if above is not None:
                outside |= estimates > above
            if below is not None:
                outside |= estimates < below
        # hold counts 1; what is rejected is always 2, whether the acceptance limits were met or not.
        np.add(held, outside, out=outcomes, dtype=np.int8, casting="unsafe")
        np.maximum(outcomes, outside.view(np.int8) * REJECT, out=outcomes)


def fill_conformance(
    estimates: Estimates,
    standard_uncertainty: float | Estimates,
    distribution: ErrorDistribution,
    tolerance: Tolerance,
    bias: float,
    probabilities: Estimates,
    table: DistributionTable | None,
) -> None:
    """Write the conformance probabilities of many estimates, at memory speed for Student's t.

    Parameters
    ----------
    estimates : ndarray of float64, shape (n,), unit of the characteristic
    standard_uncertainty : float or ndarray of float64, shape (n,)
    distribution : ErrorDistribution
    tolerance : Tolerance
    bias : float, unit of the characteristic
        Uncorrected.
    probabilities : ndarray of float64, shape (n,)
        Overwritten.
    table : DistributionTable or None
        Of the distribution, where that is Student's t of finite degrees of freedom.
    """
    u = standard_uncertainty
    if not isinstance(distribution, StudentT):
        probabilities[...] = conformance_probability(estimates, u, distribution, tolerance, bias=bias)
        return
    lower, upper = shifted(tolerance, bias)
    if lower is None or upper is None:
        if upper is not None:
            np.subtract(upper, estimates, out=probabilities)
        else:
            np.subtract(estimates, lower or 0.0, out=probabilities)
        probabilities *= 1 / u
        _distribute(probabilities, table)
        return
    # From the side on which the estimate lies, so that nothing cancels far outside.
    np.subtract(estimates, (lower + upper) / 2, out=probabilities)
    np.abs(probabilities, out=probabilities)
    probabilities *= -1 / u
    half_width = (upper - lower) / (2 * u)
    far = probabilities - half_width
    probabilities += half_width
    _distribute(probabilities, table)
    _distribute(far, table)
    probabilities -= far
    if upper < lower:
        np.maximum(probabilities, 0.0, out=probabilities)


def _distribute(z: Estimates, table: DistributionTable | None) -> None:
    """Replace z by the distribution function at z."""
    if table is None:
        ndtr(z, out=z)
    else:
        table.fill(z)
