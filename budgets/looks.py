"""Several looks at one lot: a lot that is held is read again and judged with all its readings together.

Each look that may release a lot adds to the risk that one at the limit is released. So a rule of K rounds
takes a smaller risk per look, such that the risk over all looks is what was agreed. The looks are correlated,
because each joins all readings before it, and they are computed as they are: the lot is looked at again only
where it was held.

Of looks that join all earlier readings at equal weights the covariance of two is the variance of the later
one. They form a chain: given one look, what comes after depends on nothing before it. That makes the risk of
any number of looks a sequence of integrals over one variable (Armitage, McPherson and Rowe 1969, from
memory).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import lru_cache

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.optimize import brentq
from scipy.special import gammaincinv, ndtr

from budgets.error_distributions import StudentT
from budgets.errors import LimitsError

Array = NDArray[np.float64]
Ends = tuple[float, float]

LARGEST_LOOKS = 10
# Beyond it a normal error has a probability below 1e-18.
_REACH = 9.0
# Looks that differ by less are the same look; those nearly the same are taken as a little more different
# than they are, which makes their risk larger.
_SAME_LOOK, _CLOSEST_LOOKS = 1 - 1e-12, 0.999
_CHAIN_TOLERANCE = 1e-6
_FEWEST_NODES, _MOST_NODES, _SCALE_NODES = 40, 600, 32


@dataclass(frozen=True)
class Look:
    """What one look does with its estimate, in the scale of the characteristic.

    Parameters
    ----------
    accepted : tuple of float, shape (2,), unit of the characteristic
        Acceptance limits; infinite where there is none.
    rejected : tuple of float, shape (2,), unit of the characteristic
        What lies below the first or above the second is rejected; what is neither accepted nor rejected is
        held, and looked at again. Infinite: nothing is rejected on that side.

    Raises
    ------
    LimitsError
        If an acceptance limit lies beyond a rejection limit, or the limits are the wrong way round.
    """

    accepted: Ends
    rejected: Ends = (-math.inf, math.inf)

    def __post_init__(self) -> None:
        (low, high), (lowest, highest) = self.accepted, self.rejected
        if not lowest <= low <= high <= highest:
            raise LimitsError(
                f"the limits of a look must rise: {lowest:g}, {low:g}, {high:g}, {highest:g}",
                where=("looks",),
            )

    @property
    def held(self) -> tuple[Ends, Ends]:
        """Where the lot is held: below and above the acceptance interval."""
        return (self.rejected[0], self.accepted[0]), (self.accepted[1], self.rejected[1])


def chain_of_looks(covariance: ArrayLike) -> tuple[float, ...]:
    """Return the correlation of each look with the one before it.

    Parameters
    ----------
    covariance : array_like, shape (looks, looks), squared unit of the characteristic
        Of the estimates of the looks, at one true value.

    Returns
    -------
    tuple of float, shape (looks - 1,)

    Raises
    ------
    LimitsError
        If it is no covariance of 1 to 10 looks, or the looks are no chain: the correlation of two looks must
        be the product of those of the steps between them.

    Examples
    --------
    >>> [round(step, 3) for step in chain_of_looks([[1, 0.5], [0.5, 0.5]])]
    [0.707]
    """
    matrix = np.asarray(covariance, dtype=np.float64)
    number = len(matrix) if matrix.ndim == 2 else 0
    if matrix.shape != (number, number) or not 1 <= number <= LARGEST_LOOKS:
        raise LimitsError(
            f"the covariance of 1 to {LARGEST_LOOKS} looks is a square matrix", where=("looks",)
        )
    deviations = np.sqrt(np.diag(matrix)) if (np.diag(matrix) > 0).all() else np.zeros(number)
    if not (np.isfinite(matrix).all() and deviations.all() and np.allclose(matrix, matrix.T, rtol=1e-9)):
        raise LimitsError("a covariance is finite and symmetric, with variances above 0", where=("looks",))
    correlation = matrix / np.outer(deviations, deviations)
    steps = np.diagonal(correlation, 1)
    if (np.abs(steps) > 1 + _CHAIN_TOLERANCE).any():
        raise LimitsError("two looks are correlated by more than 1", where=("looks",))
    for first in range(number):
        product = np.cumprod(steps[first:])
        if (np.abs(correlation[first, first + 1 :] - product) > _CHAIN_TOLERANCE).any():
            raise LimitsError(
                "the looks do not each join all readings before at equal weights", where=("looks",)
            )
    return tuple(float(min(1.0, step)) for step in steps)


def probability_of_release(
    covariance: ArrayLike,
    looks: Sequence[Look],
    true_value: float,
    degrees_of_freedom: float = math.inf,
) -> float:
    """Return the probability that a lot of a given true value is ever released.

    Parameters
    ----------
    covariance : array_like, shape (looks, looks), squared unit of the characteristic
        As in `chain_of_looks`.
    looks : sequence of Look
        As many as the covariance has.
    true_value : float, unit of the characteristic
    degrees_of_freedom : float
        Of the one estimate of the scale of all errors; ``math.inf`` for the multivariate normal distribution,
        else the errors are multivariate t.

    Returns
    -------
    float

    Raises
    ------
    LimitsError
        As in `chain_of_looks`; or if the numbers of looks differ.

    Notes
    -----
    Source: Armitage, McPherson and Rowe 1969 (from memory) for the sequence of integrals; multivariate t as a
    normal distribution of random scale, Dunnett and Sobel 1954 (from memory).
    """
    steps = chain_of_looks(covariance)
    if len(looks) != len(steps) + 1:
        raise LimitsError(f"{len(looks)} looks for {len(steps) + 1} variances", where=("looks",))
    deviations = np.sqrt(np.diag(np.asarray(covariance, dtype=np.float64)))
    standardised = [
        Look(
            ((look.accepted[0] - true_value) / u, (look.accepted[1] - true_value) / u),
            ((look.rejected[0] - true_value) / u, (look.rejected[1] - true_value) / u),
        )
        for look, u in zip(looks, deviations, strict=True)
    ]
    return _released(steps, standardised, degrees_of_freedom)


def overall_risk(
    steps: Sequence[float],
    risk_per_look: float,
    degrees_of_freedom: float = math.inf,
    *,
    rejection: str | None = "at_tolerance_limit",
) -> float:
    """Return the probability that a lot exactly at its one tolerance limit is released by any of its looks.

    Parameters
    ----------
    steps : sequence of float, shape (looks - 1,)
        The correlation of each look with the one before it; see `chain_of_looks`.
    risk_per_look : float
        The risk at the limit of each look by itself, above 0 and below 0.5.
    degrees_of_freedom : float
    rejection : {"at_tolerance_limit", "guarded"} or None
        What ends the looks: an estimate beyond the tolerance limit, one beyond the mirrored acceptance limit,
        or (None) nothing.

    Returns
    -------
    float

    Raises
    ------
    LimitsError
        For a risk or a correlation out of its range.

    Notes
    -----
    With two tolerance limits, and limits of the same risk, it is an upper bound: a look that would have
    released by the one limit alone may hold by the other. Own derivation; compared with the multivariate
    normal distribution and with simulation.

    Examples
    --------
    >>> round(overall_risk([0.5**0.5], 0.05, rejection=None), 3)
    0.08
    """
    if not 0 < risk_per_look < 0.5:
        raise LimitsError("the risk per look must lie between 0 and 0.5", where=("risk_per_look",))
    if not all(0 <= step <= 1 for step in steps) or len(steps) >= LARGEST_LOOKS:
        raise LimitsError(
            f"{LARGEST_LOOKS} looks at most, correlated by 0 to 1, one with the next", where=("steps",)
        )
    factor = StudentT(degrees_of_freedom).upper_quantile(risk_per_look)
    ends = {"at_tolerance_limit": 0.0, "guarded": factor, None: math.inf}
    if rejection not in ends:
        raise LimitsError("rejection is at_tolerance_limit, guarded or None", where=("rejection",))
    look = Look((-math.inf, -factor), (-math.inf, ends[rejection]))
    return _released(tuple(steps), [look] * (len(steps) + 1), degrees_of_freedom)


def risk_per_look(
    steps: Sequence[float],
    largest_risk: float,
    degrees_of_freedom: float = math.inf,
    *,
    rejection: str | None = "at_tolerance_limit",
) -> float:
    """Return the risk of each look that makes the risk of all looks together what was agreed.

    Parameters
    ----------
    steps, degrees_of_freedom, rejection
        As in `overall_risk`.
    largest_risk : float
        Of all looks together, at the tolerance limit.

    Returns
    -------
    float
        ``largest_risk`` itself for one look, or for looks that are all the same.

    Raises
    ------
    LimitsError
        As in `overall_risk`.

    Examples
    --------
    The factor per look for two looks of one reading each, one-sided 5 %:

    >>> risk = risk_per_look([0.5**0.5], 0.05, rejection=None)
    >>> round(StudentT(math.inf).upper_quantile(risk), 3)
    1.875
    """

    def excess(risk: float) -> float:
        return overall_risk(steps, risk, degrees_of_freedom, rejection=rejection) - largest_risk

    if excess(largest_risk) <= 0:
        return largest_risk
    # No more than the sum over the looks, so that this is never too much.
    return float(brentq(excess, largest_risk / (len(steps) + 1), largest_risk, xtol=1e-13, rtol=1e-10))


def power_of_a_further_look(
    estimate: float,
    covariance: ArrayLike,
    accepted: Ends,
    degrees_of_freedom: float = math.inf,
) -> float:
    """Return the probability that the next look releases a lot that is held now.

    Parameters
    ----------
    estimate : float, unit of the characteristic
        Of the looks so far.
    covariance : array_like, shape (2, 2), squared unit of the characteristic
        Of this estimate and the next one, which joins further readings with it.
    accepted : tuple of float, shape (2,), unit of the characteristic
        Acceptance limits of the next look; infinite where there is none.
    degrees_of_freedom : float

    Returns
    -------
    float
        Nothing is taken as known of the true value but the estimate.

    Notes
    -----
    The next estimate is ``y12 = w1 y1 + w2 y2``; its change has the standard uncertainty
    ``w2 sqrt(u1^2 + u2^2 - 2 c12)``, which is that of the difference of the two estimates. Own derivation.

    Examples
    --------
    >>> round(power_of_a_further_look(1.0, [[2.0, 1.0], [1.0, 1.0]], (-math.inf, 2.0)), 4)
    0.8413
    """
    (first, shared), (_, second) = np.asarray(covariance, dtype=np.float64)
    change = math.sqrt(max(0.0, float(first + second - 2 * shared)))
    low, high = accepted
    if change == 0:
        return float(low <= estimate <= high)
    errors = StudentT(degrees_of_freedom)
    missed = errors.lower_tail((low - estimate) / change) + errors.upper_tail((high - estimate) / change)
    return max(0.0, 1.0 - float(missed))


@lru_cache(maxsize=256)
def gauss_legendre(number: int) -> tuple[Array, Array]:
    """Return the nodes and weights of the Gauss-Legendre quadrature over (-1, 1).

    Parameters
    ----------
    number : int

    Returns
    -------
    tuple of ndarray, shape (number,)
        Kept, for they are used again and again: not to be changed.
    """
    nodes, weights = np.polynomial.legendre.leggauss(number)
    return nodes, weights


# --- the sequence of integrals ------------------------------------------------------------------------------


def _released(steps: Sequence[float], looks: Sequence[Look], degrees_of_freedom: float) -> float:
    if math.isinf(degrees_of_freedom):
        return float(_chain(steps, looks, np.ones(1))[0])
    # Errors in units of their estimated scale are normal errors over s, s^2 a chi-square over its degrees.
    nodes, weights = gauss_legendre(_SCALE_NODES)
    # Both ends of (0, 1) are approached smoothly, so that few nodes serve small degrees of freedom too.
    place = (1 + nodes) / 2
    share = place**3 * (10 - 15 * place + 6 * place**2)
    density = 30 * place**2 * (1 - place) ** 2 / 2
    scales = np.sqrt(gammaincinv(degrees_of_freedom / 2, share) * 2 / degrees_of_freedom)
    return float(np.sum(weights * density * _chain(steps, looks, scales)))


def _chain(steps: Sequence[float], looks: Sequence[Look], scales: Array) -> Array:
    """Return the probability of release, for errors that are normal once the limits are scaled."""
    released = _between(scales, looks[0].accepted)
    held: _Held | None = None
    for number, step in enumerate(steps):
        if step > _SAME_LOOK and looks[number + 1] == looks[number]:
            continue  # nothing new was seen: what was held stays so
        known = min(step, _CLOSEST_LOOKS)
        spread = math.sqrt(1 - known**2)
        held = _held(looks[number], scales, spread, held)
        low, high = looks[number + 1].accepted
        upper = ndtr((high * scales[:, None] - known * held.places) / spread)
        lower = ndtr((low * scales[:, None] - known * held.places) / spread)
        released = released + np.sum(held.masses * (upper - lower), axis=1)
        held = replace(held, known=known, spread=spread)
    return released


@dataclass(frozen=True)
class _Held:
    """Where a look holds: nodes with their probabilities, and how the next look follows from them."""

    places: Array
    masses: Array
    known: float
    spread: float


def _held(look: Look, scales: Array, spread: float, before: _Held | None) -> _Held:
    nodes, weights = _held_nodes(look, scales, spread)
    if before is None:
        density = np.exp(-(nodes**2) / 2)
    else:
        moved = (nodes[:, :, None] - before.known * before.places[:, None, :]) / before.spread
        density = np.einsum("msn,mn->ms", np.exp(-(moved**2) / 2), before.masses) / before.spread
    return _Held(nodes, weights * density / math.sqrt(2 * math.pi), 0.0, 1.0)


def _between(scales: Array, ends: Ends) -> Array:
    found: Array = ndtr(ends[1] * scales) - ndtr(ends[0] * scales)
    return found


def _held_nodes(look: Look, scales: Array, spread: float) -> tuple[Array, Array]:
    """Return the nodes and weights of an integral over where a look holds, for every scale."""
    nodes, weights = [np.zeros((len(scales), 0))], [np.zeros((len(scales), 0))]
    for low, high in look.held:
        start = np.clip(low * scales, -_REACH, _REACH)[:, None]
        length = np.clip(high * scales, -_REACH, _REACH)[:, None] - start
        number = int(np.clip(2.5 * length.max() / spread, _FEWEST_NODES, _MOST_NODES))
        if not length.any():
            continue
        x, w = gauss_legendre(number)
        nodes.append(start + length * (1 + x) / 2)
        weights.append(w * length / 2)
    return np.concatenate(nodes, axis=1), np.concatenate(weights, axis=1)
