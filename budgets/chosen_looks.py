"""Looks whose readings are chosen as they come: how much is read again may depend on what was seen.

Who sees a first estimate just beyond its limit may take one more sample, and who sees it far beyond many.
Such a choice releases a lot at the limit more often than any plan that is made before. So the risk over all
looks is that of the worst choice: from the last look back, at every estimate that is held, the way to go on
that releases most often (dynamic programming, Bellman 1957, from memory).
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import brentq
from scipy.special import ndtr, ndtri

from budgets.errors import LimitsError
from budgets.looks import LARGEST_LOOKS, gauss_legendre

Array = NDArray[np.float64]
Step = tuple[float, float]

# Estimates that are held, ways to go on from each, and the least news of a look that is told from none: the
# standard deviation of its estimate given the one before.
_NODES, _WAYS, _LAST_WAYS = 128, 24, 96
_LEAST_NEWS, _LEAST_LAST_NEWS = 0.06, 0.002
_NO_NEWS = 1e-6


def risk_of_chosen_looks(
    steps: Sequence[Step], risk_per_look: float, *, rejection: str = "at_tolerance_limit"
) -> float:
    """Return the largest probability that a lot at its one tolerance limit is released by any of its looks.

    Parameters
    ----------
    steps : sequence of tuple of float, shape (looks - 1, 2)
        The smallest and the largest correlation of each look with the one before it, as what is read leaves
        it; any between them may be chosen.
    risk_per_look : float
        The risk at the limit of each look by itself, above 0 and below 0.5.
    rejection : {"at_tolerance_limit", "guarded"}
        What ends the looks; see `budgets.looks.overall_risk`.

    Returns
    -------
    float
        Over all ways to choose the readings of a look by the estimates before it. Taken for a standard
        uncertainty that is known: with the same risk per look, fewer degrees of freedom leave the looks more
        alike and the risk smaller.

    Raises
    ------
    LimitsError
        For a risk or a correlation out of its range.

    Examples
    --------
    >>> round(risk_of_chosen_looks([(0.5, 1.0)], 0.0293), 3)
    0.054
    """
    _check(steps, risk_per_look, rejection)
    z = -float(ndtri(risk_per_look))
    x, w = gauss_legendre(_NODES)
    highest = 0.0 if rejection == "at_tolerance_limit" else z
    held, weights = (highest - z) / 2 + (highest + z) / 2 * x, (highest + z) / 2 * w
    later = np.zeros(_NODES)
    for number, step in enumerate(reversed(steps)):
        later = _best(step, z, held, weights, later if number else None)
    density = np.exp(-(held**2) / 2) / math.sqrt(2 * math.pi)
    return float(risk_per_look + np.sum(weights * density * later))


def risk_per_chosen_look(
    steps: Sequence[Step], largest_risk: float, *, rejection: str = "at_tolerance_limit"
) -> float:
    """Return the risk of each look that holds the risk of all, however their readings are chosen.

    Parameters
    ----------
    steps, rejection
        As in `risk_of_chosen_looks`.
    largest_risk : float
        Of all looks together, at the tolerance limit.

    Returns
    -------
    float

    Raises
    ------
    LimitsError
        As in `risk_of_chosen_looks`.
    """

    def excess(risk: float) -> float:
        return risk_of_chosen_looks(steps, risk, rejection=rejection) - largest_risk

    if excess(largest_risk) <= 0:
        return largest_risk
    # More than the sum over the looks, which a choice between their readings may exceed.
    lowest = largest_risk / (4 * (len(steps) + 1))
    return float(brentq(excess, lowest, largest_risk, xtol=1e-11, rtol=1e-8))


def _check(steps: Sequence[Step], risk: float, rejection: str) -> None:
    if not 0 < risk < 0.5:
        raise LimitsError("the risk per look must lie between 0 and 0.5", where=("risk_per_look",))
    if not all(0 <= least <= most <= 1 for least, most in steps) or len(steps) >= LARGEST_LOOKS:
        raise LimitsError(
            f"{LARGEST_LOOKS} looks at most, correlated by 0 to 1, one with the next", where=("steps",)
        )
    if rejection not in ("at_tolerance_limit", "guarded"):
        raise LimitsError("rejection is at_tolerance_limit or guarded", where=("rejection",))


def _best(step: Step, z: float, held: Array, weights: Array, later: Array | None) -> Array:
    """Return how often an estimate that is held is released by the best way to go on.

    ``later`` is that of the look to come, at the same estimates; None: there is no other look after it.
    """
    most_news, least_news = (math.sqrt(max(0.0, 1 - correlation**2)) for correlation in step)
    if most_news < _NO_NEWS:
        return np.zeros_like(held) if later is None else later
    finest, ways = (_LEAST_LAST_NEWS, _LAST_WAYS) if later is None else (_LEAST_NEWS, _WAYS)
    most_news = max(most_news, finest)
    news = np.geomspace(max(least_news, finest), most_news, ways if least_news < most_news else 1)[:, None]
    centre = np.sqrt(1 - news**2) * held
    at_once = ndtr((-z - centre) / news)
    if later is None:
        found: Array = np.max(at_once, axis=0)
        return found
    density = np.exp(-(((held - centre[:, :, None]) / news[:, :, None]) ** 2) / 2)
    density /= news[:, :, None] * math.sqrt(2 * math.pi)
    whole: Array = np.max(at_once + density @ (weights * later), axis=0)
    # A look with less news than that is as good as none.
    return whole if least_news >= finest else np.maximum(whole, later)
