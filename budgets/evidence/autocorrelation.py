"""Noise that follows itself: what the mean of successive readings of one held sample is worth."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from budgets.errors import EvidenceError
from budgets.evidence.variograms import Array

# A variance of a mean, over that of a reading, that is a difference of rounding.
_NOTHING = 1e-12


@dataclass(frozen=True)
class MeanOfReadings:
    """The variance of a mean of successive readings.

    Parameters
    ----------
    variance : float, unit squared
        Of the mean.
    single_variance : float, unit squared
        Of one reading.
    effective_number : float
        Of independent readings that the mean is worth.
    degrees_of_freedom : float
    autocorrelations : tuple of float
        From lag 0 on, as far as they count.
    """

    variance: float
    single_variance: float
    effective_number: float
    degrees_of_freedom: float
    autocorrelations: tuple[float, ...]


def mean_of_readings(values: Array, number: int) -> MeanOfReadings:
    """Return the variance of the mean of successive readings from a series on a held sample.

    Parameters
    ----------
    values : ndarray, shape (n,), unit of the characteristic
    number : int
        Readings averaged.

    Returns
    -------
    MeanOfReadings

    Raises
    ------
    EvidenceError
        If the correlation does not die out within a quarter of the series, or readings that go against one
        another leave the mean no variance.

    Notes
    -----
    ``u^2 = sigma^2/n_eff``, ``n_eff = n / (1 + 2 sum_{k<n} (1 - k/n) rho_k)``. The autocovariances of a
    series around its own mean are low by the variance of that mean, which is put back. They count up to the
    first pair whose sum is not positive. Degrees of freedom: see `_degrees_of_freedom`.
    Source: JCGM 100:2008, 4.2.7 names the case (from memory);
    Bayley and Hammersley, Supplement to the Journal of the Royal Statistical Society 8 (1946), for n_eff;
    Geyer, Statistical Science 7 (1992), for the end of the sum (both from memory).
    """
    n = len(values)
    found = _covariances(values, n // 4 + 1)
    last = _last_lag(found)
    k = np.arange(1, last + 1)
    # Var(mean of the series) = C_0/n + 2/n^2 sum (n - k) C_k, with C_k = found_k + that variance
    own = found[0] / n + 2 * float((n - k) @ found[1 : last + 1]) / n**2
    share = 1 / n + 2 * float((n - k).sum()) / n**2
    covariances = found[: last + 1] + max(0.0, own / (1 - share))
    within = np.arange(1, min(last, number - 1) + 1)
    weights = np.concatenate(([1 / number], 2 * (number - within) / number**2))
    variance = float(weights @ covariances[: len(weights)])
    if variance <= _NOTHING * float(covariances[0]):
        raise EvidenceError(
            f"readings that go against one another leave the mean of {number} no variance that could be "
            "found from this series: it is no noise but an alternation, whose cause should be found first",
            where=("options", "readings_averaged"),
        )
    return MeanOfReadings(
        variance=variance,
        single_variance=float(covariances[0]),
        effective_number=float(covariances[0]) / variance,
        degrees_of_freedom=_degrees_of_freedom(covariances, n, number),
        autocorrelations=tuple(float(c) for c in covariances / covariances[0]),
    )


def _degrees_of_freedom(covariances: Array, n: int, number: int) -> float:
    """Return the degrees of freedom of the variance of a mean, a sum of autocovariances of a series.

    The series has the smooth spectrum S of the autocovariances that count, and the mean sees it through a
    filter T: ``Var(sum T S) = (2/n) mean (T S)^2``, so there are ``n mean(T S)^2 / mean((T S)^2)`` of them,
    less the one of the series' own mean (Priestley, Spectral Analysis and Time Series (1981), 6.2, from
    memory). T of the lags that count would be right if the last lag were known; it is found from the same
    series. T of all lags within the mean asks for no last lag, and gives too few. Their geometric mean is
    near to, and rather below, what simulated variances scatter by: no source.
    """
    spectrum = np.maximum(0.0, _over_frequencies(covariances / covariances[0], n))
    lags = np.arange(number)
    found = 1.0
    for last in (min(len(covariances), number), number):
        seen = _over_frequencies((1 - lags[:last] / number), n) * spectrum
        found *= max(1.0, n * float(seen.mean()) ** 2 / float((seen**2).mean()) - 1)
    return math.sqrt(found)


def _over_frequencies(of_lags: Array, n: int) -> Array:
    """Return what values of lags, the same on either side of 0, are at the frequencies 1/n, 2/n, ..."""
    padded = np.zeros(n)
    padded[: len(of_lags)] = 2 * of_lags
    padded[0] = of_lags[0]
    return np.asarray(np.fft.rfft(padded).real[1:])


def _covariances(values: Array, lags: int) -> Array:
    """Return the autocovariances of a series around its mean, each over its own number of products."""
    n = len(values)
    centred = values - values[0]
    centred = centred - centred.mean()
    spectrum = np.fft.rfft(centred, 2 * n)
    products = np.fft.irfft(np.abs(spectrum) ** 2, 2 * n)[: lags + 1]
    return np.asarray(products / (n - np.arange(lags + 1)))


def _last_lag(covariances: Array) -> int:
    """Return the last lag before the sum of a pair of autocovariances is no longer positive.

    Raises
    ------
    EvidenceError
        If there is none among those given.
    """
    for first in range(2, len(covariances) - 1, 2):
        if covariances[first] + covariances[first + 1] <= 0:
            return first - 1
    raise EvidenceError(
        "the readings are still correlated after a quarter of the series: the sample or the analyzer "
        "drifted, or the series is too short",
        where=("rows",),
    )
