"""Variograms of process streams: from a series, and what they say of increments taken from a lot."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from budgets.errors import EvidenceError

Array = NDArray[np.float64]

SCHEMES = ("random", "stratified", "systematic")
# Ordinates on each side; their median is the ground that a cycle has to stand out of.
_NEIGHBOURS = 10
_SIGNIFICANCE = 0.001


def variogram(values: Array, lags: int) -> Array:
    """Return half the mean squared difference of values so many places apart.

    Parameters
    ----------
    values : ndarray, shape (n,), unit of the characteristic
    lags : int
        Largest lag, below n.

    Returns
    -------
    ndarray, shape (lags + 1,), unit squared
        For the lags 0 (where it is 0) to `lags`.

    Notes
    -----
    ``v(h) = sum (x_{t+h} - x_t)^2 / (2 (n - h))``. Source: Gy, Sampling for Analytical Purposes (1998), on
    the variogram (from memory).

    Examples
    --------
    >>> variogram(np.array([1.0, 2.0, 4.0]), 2).round(6).tolist()
    [0.0, 1.25, 4.5]
    """
    n = len(values)
    centred = values - values[0]
    centred = centred - centred.mean()
    spectrum = np.fft.rfft(centred, 2 * n)
    products = np.fft.irfft(np.abs(spectrum) ** 2, 2 * n)[: lags + 1]
    sums = np.concatenate(([0.0], np.cumsum(centred**2)))
    lag = np.arange(lags + 1)
    # sum of x_t^2 over the pairs' later and earlier members
    ends = (sums[n] - sums[lag]) + sums[n - lag]
    found = np.maximum(0.0, ends - 2 * products) / (2 * (n - lag))
    found[0] = 0.0
    return np.asarray(found)


def sampling_weights(lot: float, increments: int, scheme: str, lags: int) -> Array:
    """Return the weights with which a variogram gives the sampling variance of a lot's mean.

    Parameters
    ----------
    lot : float
        Length of the lot, in places of the series.
    increments : int
        Number taken from it.
    scheme : {"random", "stratified", "systematic"}
        Anywhere in the lot; anywhere in each of N equal parts; in equal steps from a random start.
    lags : int
        Largest lag of the variogram.

    Returns
    -------
    ndarray, shape (lags + 1,)
        The variance is the sum of weights times variogram, linear between the lags; the first weight is that
        of the limit at lag 0, the nugget. The weights add up to 1/increments.

    Raises
    ------
    EvidenceError
        If the scheme is unknown or the lot longer than the variogram reaches.

    Notes
    -----
    With ``w'(j) = (2/j^2) int_0^j (j - s) v(s) ds``, the mean variogram within a length j, and j = lot/N:
    random ``w'(lot)/N``, stratified ``w'(j)/N``, systematic ``w'(lot) - (2/N^2) sum_k (N - k) v(k j)``, exact
    for every variogram. Source: Gy, Sampling for Analytical Purposes (1998), on auxiliary functions (from
    memory); the exact systematic form is derived and checked by simulation.
    """
    if scheme not in SCHEMES:
        raise EvidenceError(f"{scheme!r} is none of {', '.join(SCHEMES)}", where=("options", "scheme"))
    if lot > lags:
        raise EvidenceError(
            f"the variogram is known up to {lags} places, the lot is {lot:g} long: record a stream at least "
            "twice as long as the lot",
            where=("options", "lot_length"),
        )
    step = lot / increments
    if scheme == "stratified":
        return _mean_weights(step, lags) / increments
    weights = _mean_weights(lot, lags)
    if scheme == "random":
        return weights / increments
    k = np.arange(1, increments)
    factors = 2 * (increments - k) / increments**2
    below = np.minimum((k * step).astype(int), lags - 1)
    share = k * step - below
    np.subtract.at(weights, below, factors * (1 - share))
    np.subtract.at(weights, below + 1, factors * share)
    return weights


def _mean_weights(length: float, lags: int) -> Array:
    """Return the weights of the mean variogram within a length, the variogram linear between lags."""
    weights = np.zeros(lags + 1)
    whole = min(int(length), lags)
    a = np.arange(whole)
    # int_0^1 (j - a - u) (1 - u) du and int_0^1 (j - a - u) u du
    weights[:whole] += (length - a) / 2 - 1 / 6
    weights[1 : whole + 1] += (length - a) / 2 - 1 / 3
    rest = length - whole
    if rest > 0:
        weights[whole] += rest**2 / 2 - rest**3 / 6
        weights[whole + 1] += rest**3 / 6
    return weights * 2 / length**2


def fold_nugget(weights: Array, found: Array, floor: float) -> tuple[Array, float]:
    """Return weights without lag 0, whose value is extrapolated from lags 1 and 2.

    Parameters
    ----------
    weights, found : ndarray, shape (lags + 1,)
        Weights, and the variogram that they are for.
    floor : float, unit squared
        Variance of the analyzer, which the nugget cannot lie below.

    Returns
    -------
    tuple of (ndarray, float)
        Weights with 0 at lag 0, and the nugget, unit squared.
    """
    folded = weights.copy()
    first = folded[0]
    folded[0] = 0.0
    nugget = 2 * found[1] - found[2]
    if nugget > found[1]:
        folded[1] += first
        return folded, float(found[1])
    if nugget < floor:
        # The part above the floor is zero; it takes no weight.
        return folded, min(floor, float(found[1]))
    folded[1] += 2 * first
    folded[2] -= first
    return folded, float(nugget)


def periodogram(values: Array) -> Array:
    """Return the periodogram at the positive frequencies 1/n, 2/n, ... below one half.

    Parameters
    ----------
    values : ndarray, shape (n,)

    Returns
    -------
    ndarray, shape ((n - 1) // 2,), unit squared
    """
    n = len(values)
    centred = values - values[0]
    spectrum = np.fft.rfft(centred - centred.mean())
    return np.asarray(np.abs(spectrum[1 : (n - 1) // 2 + 1]) ** 2 / n)


def quadratic_degrees_of_freedom(filtered: Array) -> float:
    """Return the degrees of freedom of a variance that is a sum over a periodogram.

    Parameters
    ----------
    filtered : ndarray
        Periodogram times the filter of the variance at every positive frequency below one half.

    Returns
    -------
    float
        At least 1.

    Notes
    -----
    The ordinates I of a Gaussian series are independent and exponential in large samples: a sum of F I has
    the mean sum F S and the variance sum (F S)^2, which (sum F I)^2 and sum (F I)^2 estimate after the
    correction for their own scatter; each ordinate stands for two frequencies. Source: Priestley, Spectral
    Analysis and Time Series (1981), 6.2 (from memory).
    """
    total, squares = float(filtered.sum()) ** 2, float((filtered**2).sum())
    return max(1.0, 4 * total / squares - 2) if squares > 0 else 1.0


def cycle(spectrum: Array) -> int | None:
    """Return the frequency of a cycle that stands out of a periodogram.

    Parameters
    ----------
    spectrum : ndarray
        At the frequencies 1/n, 2/n, ...

    Returns
    -------
    int or None
        Number of the ordinate, counted from 1: cycles in the series. None when none stands out.

    Notes
    -----
    An ordinate, after whitening by the first autocorrelation, over the median of its neighbours, against the
    exponential distribution with Bonferroni's bound. Common practice, no source.
    """
    number = len(spectrum)
    if number < 2 * _NEIGHBOURS + 1:
        return None
    cosines = np.cos(np.pi * np.arange(1, number + 1) / (number + 1))
    first = float(spectrum @ cosines / spectrum.sum())
    # A slow process has a spectrum that falls steeply, where every neighbour on one side is far smaller.
    white = spectrum * (1 + first * first - 2 * first * cosines)
    windows = np.lib.stride_tricks.sliding_window_view(white, 2 * _NEIGHBOURS + 1)
    places = np.clip(np.arange(number) - _NEIGHBOURS, 0, number - 2 * _NEIGHBOURS - 1)
    ground = np.median(windows, axis=1)[places]
    ratios = np.divide(white, ground, out=np.zeros(number), where=ground > 0)
    best = int(ratios.argmax())
    # The median of an exponential variable is ln 2 of its mean; that of 20 is known to about a quarter.
    limit = 1.5 * np.log(number / _SIGNIFICANCE) / np.log(2)
    return best + 1 if ratios[best] > limit else None
