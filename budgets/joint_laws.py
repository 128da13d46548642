"""The joint law of true value and estimate over a production, and the rates that it gives.

Every rate is one sum over nodes ``z`` of the density of the prior times two conditional probabilities: that
the true value there does not conform, and that the estimate is accepted. The first may be a step; its place
is then an edge between the pieces on which Gauss-Legendre nodes stand, so that every piece is smooth. All
terms are positive, so the sums keep their relative digits far out in the tails.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, fields
from typing import NamedTuple, Self

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtr

from budgets.distribution_tables import tail_table
from budgets.level_dependence import LevelDependence
from budgets.production_priors import ProductionPrior, standard_marks

Array = NDArray[np.float64]

NODES, WEIGHTS = np.polynomial.legendre.leggauss(12)
# Rows that are summed at once: few enough for the working arrays to stay in the processor's cache.
_BLOCK = 64


@dataclass(frozen=True)
class LimitRows:
    """Tolerance and acceptance limits, a row for each case.

    Parameters
    ----------
    lower_tolerance, upper_tolerance, lower_acceptance, upper_acceptance : ndarray, shape (n,), or None
        Unit of the characteristic; None: no such limit.
    """

    lower_tolerance: Array | None
    upper_tolerance: Array | None
    lower_acceptance: Array | None
    upper_acceptance: Array | None

    @property
    def size(self) -> int:
        """The number of rows."""
        return next(int(column.size) for column in self._columns() if column is not None)

    def _columns(self) -> list[Array | None]:
        return [getattr(self, item.name) for item in fields(self)]

    def chosen(self, rows: slice) -> Self:
        """Return some of the rows."""
        return type(self)(*(None if column is None else column[rows] for column in self._columns()))

    def moved(self, tolerance: Array | float, acceptance: Array | float) -> Self:
        """Return the rows with tolerance limits and acceptance limits moved."""
        by = (tolerance, tolerance, acceptance, acceptance)
        return type(self)(
            *(
                None if column is None else column + shift
                for column, shift in zip(self._columns(), by, strict=True)
            )
        )


class Rates(NamedTuple):
    """Joint probabilities over a production; arrays of shape (n,)."""

    nonconforming_accepted: Array
    conforming_not_accepted: Array
    nonconforming_not_accepted: Array
    conforming_accepted: Array

    @property
    def accepted(self) -> Array:
        """The rate of acceptance."""
        return np.minimum(self.nonconforming_accepted + self.conforming_accepted, 1.0)

    @property
    def not_accepted(self) -> Array:
        """The rate of no acceptance, not one minus the other."""
        return self.conforming_not_accepted + self.nonconforming_not_accepted


@dataclass(frozen=True)
class JointLaw:
    """True value and estimate given a place z on the axis of the prior.

    Parameters
    ----------
    prior : ProductionPrior
        Its density stands on the axis of z.
    truth_spread : LevelDependence or None
        Of the true value around z; None: the true value is z.
    intercept, slope : float
        The estimate is spread around ``intercept + slope * z``.
    spread : LevelDependence
        Of the estimate around that.
    degrees_of_freedom : float
        Of both spreads.
    """

    prior: ProductionPrior
    truth_spread: LevelDependence | None
    intercept: float
    slope: float
    spread: LevelDependence
    degrees_of_freedom: float

    def rates(self, rows: LimitRows) -> Rates:
        """Return the rates for every row of limits.

        Parameters
        ----------
        rows : LimitRows

        Returns
        -------
        Rates
            Relative error below 1e-10 down to 1e-12; what lies more than twelve standard deviations out is 0.
        """
        found = np.empty((4, rows.size))
        for start in range(0, rows.size, _BLOCK):
            block = slice(start, start + _BLOCK)
            found[:, block] = self._rates(rows.chosen(block))
        return Rates(*found)

    def _rates(self, rows: LimitRows) -> tuple[Array, ...]:
        z, mass = self.nodes(rows)
        accepted, refused = self._estimates(z, rows)
        share_outside, share_inside = self.truths(z, rows)
        wrong, right = mass * share_outside, mass * share_inside
        return tuple(
            np.einsum("ij,ij->i", one, other)
            for one, other in ((wrong, accepted), (right, refused), (wrong, refused), (right, accepted))
        )

    def nodes(self, rows: LimitRows) -> tuple[Array, Array]:
        """Return places z and the share of the prior that each stands for.

        Parameters
        ----------
        rows : LimitRows
            The places are chosen for limits such as these.

        Returns
        -------
        tuple of ndarray, shape (n, m)
        """
        edges = self._edges(rows)
        half = np.diff(edges) / 2
        # Pieces without width come from limits and steps beyond the reach of the prior: a third of them all.
        wide = half.any(axis=0)
        half = half[:, wide]
        z = (edges[:, :-1][:, wide] + half)[:, :, None] + half[:, :, None] * NODES
        weights = half[:, :, None] * WEIGHTS
        z = z.reshape(rows.size, -1)
        return z, self.prior.density(z) * weights.reshape(rows.size, -1)

    def _edges(self, rows: LimitRows) -> Array:
        marks = self.prior.marks
        parts = [np.broadcast_to(marks, (rows.size, marks.size))]
        steps = standard_marks(self.degrees_of_freedom)
        for limit in (rows.lower_tolerance, rows.upper_tolerance):
            if limit is not None:
                spread = np.zeros(1) if self.truth_spread is None else _at(self.truth_spread, limit)
                places = np.zeros(1) if self.truth_spread is None else steps
                parts.append(limit[:, None] + spread[:, None] * places)
        for limit in (rows.lower_acceptance, rows.upper_acceptance):
            if limit is not None and self.slope:
                centre = (limit - self.intercept) / self.slope
                spread = _at(self.spread, centre) / abs(self.slope)
                parts.append(centre[:, None] + spread[:, None] * steps)
        edges = np.concatenate(parts, axis=1)
        np.clip(edges, marks[0], marks[-1], out=edges)
        edges.sort(axis=1)
        return edges

    def _estimates(self, z: Array, rows: LimitRows) -> tuple[Array, Array]:
        """Return the probability that the estimate at z is accepted, and that it is not."""
        expected = z if (self.intercept, self.slope) == (0.0, 1.0) else self.intercept + self.slope * z
        inside = (rows.lower_acceptance, rows.upper_acceptance)
        spread = _at(self.spread, z) if self.spread.proportional else self.spread.constant
        return _shares(expected, spread, inside, self.degrees_of_freedom)

    def truths(self, z: Array, rows: LimitRows) -> tuple[Array, Array]:
        """Return the probability that the true value at z does not conform, and that it does.

        Parameters
        ----------
        z : ndarray, shape (n, m)
        rows : LimitRows

        Returns
        -------
        tuple of ndarray, shape (n, m)
        """
        if self.truth_spread is None:
            outside = _beyond(z, rows)
            return outside.astype(np.float64), (~outside).astype(np.float64)
        inside = (rows.lower_tolerance, rows.upper_tolerance)
        conforming, not_conforming = _shares(z, _at(self.truth_spread, z), inside, self.degrees_of_freedom)
        return not_conforming, conforming


def _at(spread: LevelDependence, z: Array) -> Array:
    return np.hypot(spread.constant, spread.proportional * z)


def _beyond(z: Array, rows: LimitRows) -> NDArray[np.bool_]:
    outside = np.zeros(z.shape, dtype=bool)
    if rows.lower_tolerance is not None:
        outside |= z < rows.lower_tolerance[:, None]
    if rows.upper_tolerance is not None:
        outside |= z > rows.upper_tolerance[:, None]
    return outside


def _shares(
    expected: Array, spread: Array | float, interval: tuple[Array | None, Array | None], nu: float
) -> tuple[Array, Array]:
    """Return the probabilities of a value inside and outside of an interval, each summed as such."""
    lower, upper = interval
    if lower is None or upper is None:
        if upper is not None:
            beyond = (upper[:, None] - expected) / spread
        else:
            assert lower is not None  # a tolerance has at least one limit
            beyond = (expected - lower[:, None]) / spread
        above, below = _tails(beyond, nu)
        return below, above
    to_upper = (upper[:, None] - expected) / spread
    to_lower = (expected - lower[:, None]) / spread
    over, not_over = _tails(to_upper, nu)
    under, not_under = _tails(to_lower, nu)
    # From the side on which the value is expected, as in conformity.conformance_probability.
    inside = np.where(to_upper < to_lower, not_over - under, not_under - over)
    return np.maximum(inside, 0.0), over + under


def _tails(z: Array, nu: float) -> tuple[Array, Array]:
    """Return the probabilities above and below z: the smaller one as a tail, the other as the rest."""
    size = np.abs(z)
    tail = ndtr(-size) if math.isinf(nu) else tail_table(nu).upper_tail(size)
    rest = 1 - tail
    positive = z > 0
    return np.where(positive, tail, rest), np.where(positive, rest, tail)
