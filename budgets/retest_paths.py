"""What becomes of the lots of a process: released, held and read again, rejected, and how many rightly.

The true value of a lot and its estimates at the looks are jointly normal, so every probability here is an
integral over the estimates of the looks, taken by Gauss-Legendre quadrature over the intervals in which a lot
is released or held. Many set points are done at once: they are the first axis of every array.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import ndtr

from budgets.errors import LimitsError, NotSupportedError
from budgets.look_limits import LookLimits
from budgets.quadrature_panels import nodes_over, panels

Array = NDArray[np.float64]

MOST_LOOKS = 4
# Of several looks whose history has to be kept, the nodes of all are combined: more would take too long.
_MOST_LOOKS_WITH_HISTORY = 3
# Beyond so many standard deviations lies less than 1e-18 of the lots.
_REACH = 9.0
# The edge of a release interval has nodes of its own: there the risk lies, however small u is.
_EDGE, _EDGE_NODES, _MIDDLE_NODES = 12.0, 32, 48
_LEAST_HOLD_NODES, _MOST_HOLD_NODES = 12, 160
_SAME = 1e-12
_NO_NEWS = 1e-6


@dataclass(frozen=True)
class LotDistribution:
    """How the true value of a lot and its estimates at the looks vary together about the set point.

    Parameters
    ----------
    covariance : ndarray, shape (1 + looks, 1 + looks), unit of the characteristic squared
        Of the lot's deviation (first row) and of the estimates; the error that is common to all lots of the
        plant is not in it.
    common_standard_uncertainty : float, unit of the characteristic
        Of the error that all estimates share: of a bias and of the reference.
    """

    covariance: Array
    common_standard_uncertainty: float

    @property
    def looks(self) -> int:
        """The number of looks."""
        return len(self.covariance) - 1


@dataclass(frozen=True)
class PathOutcomes:
    """What becomes of the lots, per set point; shares of all lots, shape (set points,).

    Parameters
    ----------
    released, held, rejected : tuple of ndarray
        At each look.
    held_for_good : tuple of ndarray
        At each look: held and not read again, because the estimate lies outside of the validated range, or a
        rule that holds the lot plans no further round.
    deviation_of_released : ndarray, unit of the characteristic
        Mean over ALL lots of (true value less its mean, counted where the lot is released).
    nonconforming_released : ndarray
        Released and not conforming: joint, mean over the common error.
    nonconforming : ndarray
        Not conforming, whatever became of them.
    """

    released: tuple[Array, ...]
    held: tuple[Array, ...]
    rejected: tuple[Array, ...]
    held_for_good: tuple[Array, ...]
    deviation_of_released: Array
    nonconforming_released: Array
    nonconforming: Array

    @property
    def release_rate(self) -> Array:
        """Share of lots that are released at some look."""
        return np.asarray(sum(self.released), dtype=np.float64)

    @property
    def further_looks(self) -> Array:
        """Mean number of looks after the first one."""
        return np.asarray(sum(self.held[:-1], np.zeros_like(self.nonconforming)), dtype=np.float64)

    @property
    def conditional_global_consumers_risk(self) -> Array:
        """Share of the released lots that do not conform; 1 where nothing is released."""
        rate = self.release_rate
        return np.divide(self.nonconforming_released, rate, out=np.ones_like(rate), where=rate > 0)


def path_outcomes(
    centres: ArrayLike,
    true_centres: ArrayLike,
    lots: LotDistribution,
    limits: tuple[LookLimits, ...],
    tolerance: tuple[float, float],
) -> PathOutcomes:
    """Return what becomes of the lots of a process at each set point.

    Parameters
    ----------
    centres : array_like, shape (set points,), unit of the characteristic
        Mean of the estimates.
    true_centres : array_like, shape (set points,), unit of the characteristic
        Mean of the true values: the same, less a bias that was left in the estimates.
    lots : LotDistribution
    limits : tuple of LookLimits
        One for each look.
    tolerance : tuple of float
        Lower and upper limit of the true value; infinite where there is none.

    Returns
    -------
    PathOutcomes

    Raises
    ------
    LimitsError
        If the numbers of looks differ, or nothing varies.
    NotSupportedError
        For more than four looks, or more than three whose estimates do not hold all that earlier ones said.

    Notes
    -----
    Own derivation from the multivariate normal distribution; absolute error below 1e-10. Only held lots are
    read again, so the looks are integrated one after the other over the held intervals. Conditioned on its
    estimates the true value is normal; the common error adds to its spread and moves no estimate. Source:
    JCGM 106:2012, clause 9 (from memory) for one look and an independent error.

    Examples
    --------
    >>> one_look = LotDistribution(np.array([[0.01, 0.01], [0.01, 0.0125]]), 0.02)
    >>> found = path_outcomes([3.0], [3.0], one_look, (LookLimits(-np.inf, 3.1, -np.inf, 3.2),),
    ...                       (-np.inf, 3.2))
    >>> print(f"{found.release_rate[0]:.4f} {found.conditional_global_consumers_risk[0]:.5f}")
    0.8145 0.00048
    """
    _check(lots, limits)
    centre = np.atleast_1d(np.asarray(centres, dtype=np.float64))
    truth = np.atleast_1d(np.asarray(true_centres, dtype=np.float64))
    walk = _Walk(centre, truth, lots, tolerance)
    for look, limit in enumerate(limits):
        walk.take(look, limit)
    spread = math.hypot(math.sqrt(lots.covariance[0, 0]), lots.common_standard_uncertainty)
    beyond = ndtr((truth - tolerance[1]) / spread) + ndtr((tolerance[0] - truth) / spread)
    return PathOutcomes(
        tuple(walk.released),
        tuple(walk.held),
        tuple(walk.rejected),
        tuple(walk.for_good),
        walk.deviation,
        walk.nonconforming,
        np.asarray(beyond),
    )


def _check(lots: LotDistribution, limits: tuple[LookLimits, ...]) -> None:
    if len(limits) != lots.looks:
        raise LimitsError(f"limits of {len(limits)} looks for {lots.looks} looks", where=("looks",))
    if not (np.isfinite(lots.covariance).all() and (np.diag(lots.covariance) > 0).all()):
        raise LimitsError(
            "nothing varies: without a variation of the process and of the readings every lot is like every "
            "other, and no share of lots can be given",
            where=("process_variation",),
        )
    if lots.looks > MOST_LOOKS:
        raise NotSupportedError(f"a set point for more than {MOST_LOOKS} looks", where=("rounds",))


class _Walk:
    """The looks one after the other; what is held so far lies in nodes with their share of the lots."""

    def __init__(
        self, centre: Array, truth: Array, lots: LotDistribution, tolerance: tuple[float, float]
    ) -> None:
        self._centre, self._truth, self._lots, self._tolerance = centre, truth, lots, tolerance
        self._paths = np.zeros((len(centre), 1, 0))
        self._mass = np.ones((len(centre), 1))
        self._kept: list[int] = []
        self.released: list[Array] = []
        self.held: list[Array] = []
        self.rejected: list[Array] = []
        self.for_good: list[Array] = []
        self.deviation, self.nonconforming = np.zeros_like(centre), np.zeros_like(centre)

    def take(self, look: int, limit: LookLimits) -> None:
        """Take one look at all lots that are still on hold."""
        own = look + 1
        on, sd = self._regression(own, self._kept)
        scale = math.sqrt(self._lots.covariance[own, own])
        if sd <= _NO_NEWS * scale:
            # A further look that repeats the one before leaves every lot where it was.
            for shares in (self.released, self.rejected, self.for_good):
                shares.append(np.zeros_like(self._centre))
            self.held.append(self._mass.sum(axis=1))
            return
        mean = self._paths @ on
        self._count(limit, mean, sd)
        self._release(own, limit, mean, sd, scale)
        if own < self._lots.looks:
            self._hold(own, limit, mean, sd, scale)

    def _regression(self, row: int, kept: list[int]) -> tuple[Array, float]:
        """Return the coefficients of a variable on the looks that are kept, and its spread about them."""
        covariance = self._lots.covariance
        if not kept:
            return np.zeros(0), math.sqrt(covariance[row, row])
        on = np.linalg.solve(covariance[np.ix_(kept, kept)], covariance[kept, row])
        left = float(covariance[row, row] - covariance[row, kept] @ on)
        return np.asarray(on, dtype=np.float64), math.sqrt(max(0.0, left))

    def _count(self, limit: LookLimits, mean: Array, sd: float) -> None:
        """Count what is held, what is rejected, and what is not read again."""
        middle = self._centre[:, None] + mean

        def share(intervals: tuple[tuple[float, float], ...]) -> Array:
            found = np.zeros_like(self._centre)
            for ends in intervals:
                low, high = ((end - middle) / sd for end in ends)
                # From the side on which the interval lies, so that small shares keep their digits.
                sign = np.where(low > 0, -1.0, 1.0)
                found = found + (self._mass * sign * (ndtr(sign * high) - ndtr(sign * low))).sum(axis=1)
            return found

        self.held.append(share(limit.held))
        self.rejected.append(share(limit.rejected))
        self.for_good.append(share(limit.held_for_good))

    def _release(self, own: int, limit: LookLimits, mean: Array, sd: float, scale: float) -> None:
        looks = [*self._kept, own]
        on, spread = self._regression(0, looks)
        spread = math.hypot(spread, self._lots.common_standard_uncertainty)
        edge = _EDGE * min(scale, spread / max(abs(float(on[-1])), 1e-9))
        nodes, weights = nodes_over(
            panels(limit.released, edge), self._centre, _REACH * scale, (_MIDDLE_NODES, _EDGE_NODES)
        )
        share = self._share(nodes, weights, mean, sd)
        if not looks[:-1] or _vanish(on[:-1], on[-1]):
            # All that the earlier looks said of the lot is in this one.
            share = share.sum(axis=1)
            deviation = nodes * on[-1]
        else:
            deviation = (self._paths @ on[:-1])[:, :, None] + nodes[:, None, :] * on[-1]
        axes = tuple(range(1, share.ndim))
        truth = self._truth.reshape(-1, *(1 for _ in axes)) + deviation
        lower, upper = self._tolerance
        beyond: Any = 0.0
        if math.isfinite(upper):
            beyond = beyond + ndtr((truth - upper) / spread)
        if math.isfinite(lower):
            beyond = beyond + ndtr((lower - truth) / spread)
        self.released.append(share.sum(axis=axes))
        self.deviation = self.deviation + (share * deviation).sum(axis=axes)
        self.nonconforming = self.nonconforming + (share * beyond).sum(axis=axes)

    def _hold(self, own: int, limit: LookLimits, mean: Array, sd: float, scale: float) -> None:
        width = max((min(high - low, 2 * _REACH * scale) for low, high in limit.held), default=0.0)
        resolved = min(sd, self._next_spread(own))
        number = int(np.clip(8 + 2.5 * width / resolved, _LEAST_HOLD_NODES, _MOST_HOLD_NODES))
        nodes, weights = nodes_over(limit.held, self._centre, _REACH * scale, (number, number))
        share = self._share(nodes, weights, mean, sd)
        if self._says_all(own):
            self._kept = [own]
            self._mass, self._paths = share.sum(axis=1), nodes[:, :, None]
            return
        if self._lots.looks > _MOST_LOOKS_WITH_HISTORY:
            raise NotSupportedError(
                f"a set point for more than {_MOST_LOOKS_WITH_HISTORY} looks of a steered process",
                where=("rounds",),
            )
        before = np.broadcast_to(self._paths[:, :, None, :], (*share.shape, len(self._kept)))
        here = np.broadcast_to(nodes[:, None, :, None], (*share.shape, 1))
        self._paths = np.concatenate([before, here], axis=-1).reshape(len(share), -1, len(self._kept) + 1)
        self._mass = share.reshape(len(share), -1)
        self._kept = [*self._kept, own]

    def _next_spread(self, own: int) -> float:
        """Return how sharply the next look depends on this one, in units of this one."""
        on, spread = self._regression(own + 1, [*self._kept, own])
        # A next look that repeats this one leaves every lot where it was: there is nothing to resolve.
        sharp = spread <= _NO_NEWS * math.sqrt(self._lots.covariance[own, own])
        return math.inf if sharp else spread / max(abs(float(on[-1])), 1e-9)

    def _says_all(self, own: int) -> bool:
        """Say whether nothing that comes depends on the looks before this one, given this one."""
        looks = [*self._kept, own]
        later = [0, *range(own + 1, self._lots.looks + 1)]
        regressions = [self._regression(row, looks)[0] for row in later]
        return all(_vanish(on[:-1], on[-1]) for on in regressions)

    def _share(self, nodes: Array, weights: Array, mean: Array, sd: float) -> Array:
        """Return the share of the lots at every node, by the path that led there."""
        z = (nodes[:, None, :] - mean[:, :, None]) / sd
        density = np.exp(-0.5 * z * z) * (1 / (sd * math.sqrt(2 * math.pi)))
        return np.asarray(density * weights[:, None, :] * self._mass[:, :, None])


def _vanish(coefficients: Array, other: float) -> bool:
    return bool((np.abs(coefficients) <= _SAME * max(1.0, abs(other))).all())
