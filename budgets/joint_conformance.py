"""Joint conformance: whether a lot meets all that is required of it at once.

Whatever the errors of the characteristics have in common, the risk that one or more of them do not conform
lies between the largest of their risks and the sum of all. Where the correlations of the errors are known,
it is the probability that a normal vector lies outside of a box.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import ndtr, ndtri, owens_t

from budgets.correlations import check_correlation_matrix
from budgets.errors import LimitsError

MOST_CHARACTERISTICS = 100
# Points for each tail of four and more characteristics: the risk is then good to a few parts in a thousand.
_POINTS = 512
_PRIMES = np.array([p for p in range(2, 542) if all(p % q for q in range(2, math.isqrt(p) + 1))])
# Within a tail the rest is a smooth function of the share of it that lies farther out.
_GAUSS = np.polynomial.legendre.leggauss(32)
_NODES, _WEIGHTS = (1 + _GAUSS[0]) / 2, _GAUSS[1] / 2
# sqrt(1 - r^2) below which two errors are one.
_DEGENERATE, _NEARLY_DEGENERATE = 1e-14, 1e-3
_TINY = 1e-300
# Of the largest risk: what is smaller than this changes no digit of the risk of all.
_NEGLIGIBLE = 1e-14


@dataclass(frozen=True)
class JointConformance:
    """The conformance of several characteristics taken together.

    Parameters
    ----------
    smallest_risk, largest_risk : float
        Between them lies the probability that one or more do not conform, whatever their errors share.
    risk : float or None
        That probability for the correlations that were given.
    """

    smallest_risk: float
    largest_risk: float
    risk: float | None = None

    @property
    def conformance_probability(self) -> float | None:
        """Probability that all conform, where the correlations are known."""
        return None if self.risk is None else 1.0 - self.risk

    @property
    def cautious_risk(self) -> float:
        """The risk to be held against a cap: the one that is known, or the largest that is possible."""
        return self.largest_risk if self.risk is None else self.risk


def joint_conformance(
    risks: Sequence[tuple[float, float]], correlations: ArrayLike | None = None
) -> JointConformance:
    """Return the joint conformance of several characteristics.

    Parameters
    ----------
    risks : sequence of tuple of float, shape (n, 2)
        For each characteristic the probability that its true value lies below, and above, its tolerance.
    correlations : array_like, shape (n, n), or None
        Of the errors of the estimates; None when they are not known.

    Returns
    -------
    JointConformance

    Raises
    ------
    LimitsError
        If there is no characteristic, or a risk is no probability.
    CorrelationError
        If the matrix is no correlation matrix of so many characteristics.

    Notes
    -----
    Bounds of Boole and Frechet: ``max r_i <= risk <= min(1, sum r_i)``. With correlations every tail is
    carried to its normal score, so that each characteristic keeps its own risk whatever its degrees of
    freedom, and the box is that of the multivariate normal distribution. Degrees of freedom that the
    characteristics share would make them fail together more often, and one or more of them less often: the
    figure is on the cautious side of the multivariate t distribution. Source: JCGM 102:2011, 7.7 (from
    memory) for the region; Owen 1956 for two characteristics; Owen, Maximov and Chertkov 2019 for the
    sampling of three and more (from memory).

    Examples
    --------
    >>> joint = joint_conformance([(0.0, 0.03), (0.0, 0.02)])
    >>> joint.smallest_risk, joint.largest_risk, joint.risk
    (0.03, 0.05, None)
    >>> round(joint_conformance([(0.0, 0.03), (0.0, 0.02)], [[1, 0], [0, 1]]).risk, 6)
    0.0494
    """
    right = all(0 <= risk <= 1 for pair in risks for risk in pair)
    if not (1 <= len(risks) <= MOST_CHARACTERISTICS and right):
        raise LimitsError(
            f"joint conformance is that of 1 to {MOST_CHARACTERISTICS} characteristics, risks from 0 to 1"
        )
    singles = [min(1.0, below + above) for below, above in risks]
    smallest, largest = max(singles), min(1.0, math.fsum(singles))
    if len(risks) == 1:
        return JointConformance(smallest, largest, singles[0])
    if correlations is None:
        return JointConformance(smallest, largest)
    matrix = check_correlation_matrix(correlations)
    if len(matrix) != len(risks):
        raise LimitsError("there is a correlation for each two characteristics", where=("correlations",))
    risk = _risk_of(risks, matrix, [i for i, single in enumerate(singles) if single > _NEGLIGIBLE * smallest])
    return JointConformance(smallest, largest, min(max(risk, smallest), largest))


def _risk_of(
    risks: Sequence[tuple[float, float]], matrix: NDArray[np.float64], counting: Sequence[int]
) -> float:
    """Return the risk of those that count; mostly one alone comes near a limit."""
    if len(counting) < 2:
        return math.fsum(sum(risks[i]) for i in counting)
    left = [risks[i] for i in counting]
    if len(counting) == 2:
        return _risk_of_two(left, float(matrix[counting[0], counting[1]]))
    return _risk_of_more(left, matrix[np.ix_(counting, counting)])


def both_exceed(one: ArrayLike, other: ArrayLike, correlation: ArrayLike) -> NDArray[np.float64]:
    """Return the probability that two standard normal values both exceed their limits.

    Parameters
    ----------
    one, other : array_like
        Probability that each exceeds its own limit.
    correlation : array_like
        Broadcasts against them.

    Returns
    -------
    ndarray
        With an error in the last digits of the larger of the two probabilities.

    Notes
    -----
    ``[Q(h) + Q(k)]/2 - T(h, a_h) - T(k, a_k) - {0 or 1/2}``. Source: Owen 1956, Tables for computing
    bivariate normal probabilities, eq. (2.1) (from memory).

    Examples
    --------
    >>> round(float(both_exceed(0.5, 0.5, 0.5)), 12) == round(1 / 4 + math.asin(0.5) / (2 * math.pi), 12)
    True
    """
    p, q, r = np.broadcast_arrays(
        np.asarray(one, dtype=np.float64), np.asarray(other, dtype=np.float64), np.asarray(correlation)
    )
    smaller, rest = np.minimum(p, q), np.sqrt((1 - r) * (1 + r))
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        h, k = -ndtri(p), -ndtri(q)
        # A limit in the very middle is taken as just above it: the limit of the formula from there.
        h, k = np.where(h == 0, _TINY, h), np.where(k == 0, _TINY, k)
        halves = owens_t(h, (k / h - r) / rest) + owens_t(k, (h / k - r) / rest)
        found = (p + q) / 2 - halves - np.where((h < 0) != (k < 0), 0.5, 0.0)
    found = np.clip(found, np.maximum(0.0, p + q - 1), smaller)
    bound = np.where(r > 0, smaller, np.maximum(0.0, p + q - 1))
    found = np.where(rest < _DEGENERATE, bound, found)
    return np.asarray(np.where((smaller == 0) | (np.maximum(p, q) == 1), smaller, found))


def _both(one: NDArray[np.float64], other: NDArray[np.float64], correlation: float) -> NDArray[np.float64]:
    """Return the probability that both of two characteristics miss their tolerance; tails last."""
    # The errors of a value below and of one above its tolerance have opposite signs.
    signs = np.array([[1.0, -1.0], [-1.0, 1.0]])
    corners = both_exceed(one[..., :, np.newaxis], other[..., np.newaxis, :], correlation * signs)
    return np.asarray(corners.sum(axis=(-2, -1)))


def _risk_of_two(risks: Sequence[tuple[float, float]], correlation: float) -> float:
    one, other = np.asarray(risks, dtype=np.float64)
    return math.fsum((*one, *other, -float(_both(one, other, correlation))))


def _risk_of_more(risks: Sequence[tuple[float, float]], matrix: NDArray[np.float64]) -> float:
    if len(matrix) > 3:
        return _sampled(risks, matrix)
    shared = matrix[:2, 2]
    scales = np.sqrt(1 - shared * shared)
    if not (scales > _NEARLY_DEGENERATE).all():
        return _sampled(risks, matrix)
    # Either of the first two, or the third without them: both of its tails, the others given it.
    partial = float(np.clip((matrix[0, 1] - shared[0] * shared[1]) / (scales[0] * scales[1]), -1, 1))
    shares = np.asarray(risks[2], dtype=np.float64)[:, np.newaxis]
    values = np.array([[1.0], [-1.0]]) * ndtri(np.maximum(_TINY, shares * _NODES))
    with np.errstate(divide="ignore"):
        scores = ndtri(np.asarray(risks[:2], dtype=np.float64))
    # by the characteristic, the tail of the third, its value, and the tail of the characteristic
    centres = (shared[:, np.newaxis, np.newaxis] * values)[..., np.newaxis] * np.array([1.0, -1.0])
    one, other = ndtr((scores.reshape(2, 1, 1, 2) - centres) / scales.reshape(2, 1, 1, 1))
    inside = 1 - one.sum(axis=-1) - other.sum(axis=-1) + _both(one, other, partial)
    third = (shares * np.maximum(0.0, inside)) @ _WEIGHTS
    return math.fsum((_risk_of_two(risks[:2], float(matrix[0, 1])), *third))


def _sampled(risks: Sequence[tuple[float, float]], matrix: NDArray[np.float64]) -> float:
    """Return the probability that one or more tails occur, exact where no two of them meet.

    Each tail is drawn from in its turn, with the others given it; a point that lies in several tails counts
    for each of them in part. The points are those of a lattice, the same every time.
    """
    number = len(matrix)
    # Square roots of primes: no two steps are in a ratio of small whole numbers (Richtmyer, from memory).
    steps = np.sqrt(_PRIMES[:number])
    points = np.abs(2 * ((np.arange(1, _POINTS + 1)[:, np.newaxis] * steps) % 1.0) - 1)
    points = np.clip(points, 1e-12, 1 - 1e-12)
    scores = ndtri(points[:, 1:])
    tails = np.asarray(risks, dtype=np.float64)
    with np.errstate(divide="ignore"):
        limits = ndtri(tails) * np.array([1.0, -1.0])
    total = []
    for place in range(number):
        others = [i for i in range(number) if i != place]
        shared = matrix[others, place]
        root = _root(matrix[np.ix_(others, others)] - np.outer(shared, shared))
        around = scores @ root.T
        for side, sign in enumerate((-1.0, 1.0)):
            share = tails[place, side]
            if share == 0:
                continue
            own = -sign * ndtri(np.maximum(_TINY, share * points[:, 0]))
            values = np.empty((_POINTS, number))
            values[:, place] = own
            values[:, others] = own[:, np.newaxis] * shared + around
            beyond = (values < limits[:, 0]).astype(int) + (values > limits[:, 1])
            # The tail itself is not left to the last digit of its own limit.
            beyond[:, place] = 1 + (beyond[:, place] > 1)
            total.append(float(share * np.mean(1 / beyond.sum(axis=1))))
    return math.fsum(total)


def _root(covariance: NDArray[np.float64]) -> NDArray[np.float64]:
    values, vectors = np.linalg.eigh(covariance)
    return np.asarray(vectors * np.sqrt(np.maximum(values, 0.0)))
