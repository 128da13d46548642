"""How large a study must be: to know a standard deviation well enough, to find a bias of a given size."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

from scipy.special import gammaln, ncfdtr

from budgets.errors import EvidenceError
from budgets.evidence.sums import standard_deviation_factors
from budgets.propagation import upper_quantile

# Beyond this no plant measures, and a wish that needs more is told so instead.
LARGEST_STUDY = 100_000
_MANY = 100
CRITERIA = ("interval_end", "relative_standard_uncertainty")
_DESIGNS = {"repeatability": "readings", "duplicates": "determinations", "agreement": "pairs"}


@dataclass(frozen=True)
class PrecisionPlan:
    """A study that knows a standard deviation as well as was wanted, and no larger one than that.

    Parameters
    ----------
    design : str
    samples, values_per_sample, values : int
        Samples, values of each, and all together; in the design ``agreement`` samples are pairs.
    degrees_of_freedom : int
    relative_standard_uncertainty : float
        Of the standard deviation.
    interval_lower, interval_upper : float
        How far the ends of its interval lie from it, as a fraction of it (-0.31, 0.83).
    coverage_probability : float
        Of that interval.
    statement : str
        The plan in words.
    """

    design: str
    samples: int
    values_per_sample: int
    values: int
    degrees_of_freedom: int
    relative_standard_uncertainty: float
    interval_lower: float
    interval_upper: float
    coverage_probability: float
    statement: str


@dataclass(frozen=True)
class BiasPlan:
    """A study that finds a bias of a given size.

    Parameters
    ----------
    pairs, groups : int
        Pairs in all, and groups (days, lots) over which they are spread; equal when every pair stands alone.
    degrees_of_freedom : int
        Of the t test.
    power : float
        Probability of finding the bias with this study.
    standard_uncertainty : float, unit of the bias
        Of the bias that the study will show, without the trueness of the reference.
    statement : str
        The plan in words.
    """

    pairs: int
    groups: int
    degrees_of_freedom: int
    power: float
    standard_uncertainty: float
    statement: str


def relative_standard_uncertainty(degrees_of_freedom: float) -> float:
    """Return the standard deviation of a standard deviation, relative to what it is on the average.

    Parameters
    ----------
    degrees_of_freedom : float

    Returns
    -------
    float

    Notes
    -----
    Exact for normal errors: ``sqrt(1 - c4^2) / c4``. Source: JCGM 100:2008, E.4.3 and Table E.1 (from
    memory).

    Examples
    --------
    >>> round(relative_standard_uncertainty(9), 2)
    0.24
    """
    nu = degrees_of_freedom
    # c4^2 = (2/nu) [Gamma((nu+1)/2) / Gamma(nu/2)]^2, the mean of s over sigma, squared
    if nu > _MANY:
        # Stirling's series, where the difference of two large logarithms would lose its digits
        logarithm = 2 * (-1 / (4 * nu) + 1 / (24 * nu**3) - 1 / (20 * nu**5))
    else:
        logarithm = math.log(2 / nu) + 2 * float(gammaln((nu + 1) / 2) - gammaln(nu / 2))
    # expm1: for many degrees of freedom 1 - c4^2 is the small difference of two numbers near one.
    return math.sqrt(-math.expm1(logarithm) / math.exp(logarithm))


def precision_plan(
    relative_uncertainty: float,
    *,
    design: str = "repeatability",
    criterion: str = "interval_end",
    coverage_probability: float = 0.95,
    samples: int | None = None,
    values_per_sample: int | None = None,
) -> PrecisionPlan:
    """Return the smallest study that knows a standard deviation to a wanted relative uncertainty.

    Parameters
    ----------
    relative_uncertainty : float
        As a fraction: 0.25 for 25 %.
    design : {"repeatability", "duplicates", "agreement"}
        Agreement: the standard error of prediction, of pairs.
    criterion : {"interval_end", "relative_standard_uncertainty"}
        What is to be so small: the distance of the upper end of the interval from the estimate (the farther
        one), or the relative standard uncertainty.
    coverage_probability : float
        Of the interval.
    samples, values_per_sample : int or None
        Where one of them is settled the other is looked for; without both, two values per sample.

    Returns
    -------
    PrecisionPlan

    Raises
    ------
    EvidenceError
        If an argument is outside of its range, or more than `LARGEST_STUDY` degrees of freedom are
        needed.

    Notes
    -----
    Degrees of freedom: ``samples (values - 1)`` within samples, ``pairs - 1`` around a bias. Source: the
    chi-square distribution of ``nu s^2/sigma^2`` (ISO 2854:1976, from memory); JCGM 100:2008, E.4.3 (from
    memory).

    Examples
    --------
    >>> precision_plan(0.25).samples
    48
    >>> precision_plan(0.24, criterion="relative_standard_uncertainty", samples=1).values_per_sample
    10
    """
    _check_precision(relative_uncertainty, design, criterion, coverage_probability)
    _check_counts(design, samples, values_per_sample)

    def reached(nu: int) -> bool:
        if criterion == "relative_standard_uncertainty":
            return relative_standard_uncertainty(nu) <= relative_uncertainty
        return standard_deviation_factors(nu, confidence=coverage_probability)[1] - 1 <= relative_uncertainty

    least = _smallest(reached, 1, "relative_uncertainty")
    if design == "agreement":
        count, each, freedom = least + 1, 1, least
    elif samples is not None:
        count, each = samples, 1 + math.ceil(least / samples)
        freedom = count * (each - 1)
    else:
        each = values_per_sample or 2
        count = math.ceil(least / (each - 1))
        freedom = count * (each - 1)
    lower, upper = standard_deviation_factors(freedom, confidence=coverage_probability)
    noun = _DESIGNS[design]
    what = f"{count} {noun}"
    if design != "agreement":
        what = f"{count} sample{'s' if count > 1 else ''} with {each} {noun} each"
    return PrecisionPlan(
        design=design,
        samples=count,
        values_per_sample=each,
        values=count * each,
        degrees_of_freedom=freedom,
        relative_standard_uncertainty=relative_standard_uncertainty(freedom),
        interval_lower=lower - 1,
        interval_upper=upper - 1,
        coverage_probability=coverage_probability,
        statement=f"the standard deviation will be known to within {100 * (lower - 1):.0f} % / "
        f"+{100 * (upper - 1):.0f} % ({freedom} degrees of freedom) from {what}",
    )


def power_of_bias_test(
    bias: float, standard_uncertainty: float, degrees_of_freedom: float, *, significance: float = 0.05
) -> float:
    """Return the probability that the two-sided t test finds a bias.

    Parameters
    ----------
    bias : float
        The true one; its sign does not matter.
    standard_uncertainty : float, unit of the bias
        True standard deviation of the mean difference.
    degrees_of_freedom : float
        Finite.
    significance : float
        Of the test.

    Returns
    -------
    float

    Notes
    -----
    Exact for normal differences: the statistic is noncentral t with noncentrality ``bias / u``, its square
    noncentral F. Source: ISO 12099:2017, the t test of the bias (from memory); its power by the noncentral
    distribution is common practice, no source.

    Examples
    --------
    >>> round(power_of_bias_test(0.5, 1 / 34**0.5, 33), 3)
    0.808
    """
    # Beyond a million the test never misses, and the square of the shift may be no number.
    shift = min(abs(bias) / standard_uncertainty, 1e6)
    if shift == 0:
        return significance
    critical = upper_quantile(significance / 2, degrees_of_freedom)
    # Both tails of t are one tail of t^2; the algorithm of the noncentral t itself fails for large shifts.
    return 1 - float(ncfdtr(1, degrees_of_freedom, shift * shift, critical * critical))


def bias_plan(
    bias: float,
    standard_deviation: float,
    *,
    power: float = 0.9,
    significance: float = 0.05,
    standard_deviation_between_groups: float = 0.0,
    pairs_per_group: int = 1,
) -> BiasPlan:
    """Return the smallest number of pairs that finds a bias of a given size.

    Parameters
    ----------
    bias : float, unit of the characteristic
        The smallest one that must not go unnoticed.
    standard_deviation : float, unit of the characteristic
        Of the differences between analyzer and reference: the standard error of prediction.
    power : float
        Wanted probability of finding it.
    significance : float
        Of the two-sided t test.
    standard_deviation_between_groups : float, unit of the characteristic
        By which the mean difference varies from day to day or lot to lot, beside the scatter within.
    pairs_per_group : int
        Pairs of one day or lot.

    Returns
    -------
    BiasPlan

    Raises
    ------
    EvidenceError
        If an argument is outside of its range, or the wish needs more than `LARGEST_STUDY` groups.

    Notes
    -----
    ``u(b)^2 = s_g^2/k + s^2/(k m)`` with k groups of m pairs and k - 1 degrees of freedom. The trueness of
    the reference method is not in it and does not fall with more pairs. Source: as in `power_of_bias_test`;
    JCGM 100:2008, H.5 (from memory), for groups.

    Examples
    --------
    >>> bias_plan(0.5, 1.0, power=0.8).pairs
    34
    """
    _check_bias(bias, standard_deviation, power, significance, standard_deviation_between_groups)
    if not _is_count(pairs_per_group, 1):
        raise EvidenceError("a whole number from 1 up is expected", where=("pairs_per_group",))
    of_a_group = math.hypot(
        standard_deviation_between_groups, standard_deviation / math.sqrt(pairs_per_group)
    )

    def power_of(groups: int) -> float:
        return power_of_bias_test(bias, of_a_group / math.sqrt(groups), groups - 1, significance=significance)

    groups = _smallest(lambda count: power_of(count) >= power, 2, "bias")
    reached = power_of(groups)
    pairs = groups * pairs_per_group
    spread = f" ({groups} groups of {pairs_per_group})" if pairs_per_group > 1 else ""
    return BiasPlan(
        pairs=pairs,
        groups=groups,
        degrees_of_freedom=groups - 1,
        power=reached,
        standard_uncertainty=of_a_group / math.sqrt(groups),
        statement=f"{pairs} pairs{spread} find a bias of {abs(bias):g} with probability {reached:.3f}; a "
        "bias of the reference method itself is not found by any number of pairs",
    )


def _smallest(reached: Callable[[int], bool], least: int, where: str) -> int:
    """Return the smallest number from ``least`` up that reaches what every larger one reaches too.

    Raises
    ------
    EvidenceError
        If `LARGEST_STUDY` does not reach it.
    """
    upper = least
    while not reached(upper):
        if upper >= LARGEST_STUDY:
            text = f"more than {LARGEST_STUDY} would be needed; ask for less"
            raise EvidenceError(text, where=(where,))
        least, upper = upper + 1, min(2 * upper, LARGEST_STUDY)
    while least < upper:
        middle = (least + upper) // 2
        least, upper = (least, middle) if reached(middle) else (middle + 1, upper)
    return upper


def _is_count(value: object, least: int) -> bool:
    return isinstance(value, int) and not isinstance(value, bool) and least <= value <= LARGEST_STUDY


def _check_precision(wanted: float, design: str, criterion: str, coverage_probability: float) -> None:
    if design not in _DESIGNS:
        raise EvidenceError(f"{design!r} cannot be planned; {', '.join(_DESIGNS)} can", where=("design",))
    if criterion not in CRITERIA:
        raise EvidenceError(f"{criterion!r} is none of {', '.join(CRITERIA)}", where=("criterion",))
    if not 0 < wanted <= 10:
        text = "a fraction above 0 and at most 10 is expected (0.25 for 25 %)"
        raise EvidenceError(text, where=("relative_uncertainty",))
    if not 0.5 <= coverage_probability <= 0.999:
        text = "a probability from 0.5 to 0.999 is expected"
        raise EvidenceError(text, where=("coverage_probability",))


def _check_counts(design: str, samples: int | None, values_per_sample: int | None) -> None:
    if samples is not None and values_per_sample is not None:
        text = "with samples and values per sample both settled there is nothing to plan"
        raise EvidenceError(text, where=("samples",))
    if samples is not None:
        if design == "agreement":
            raise EvidenceError("the number of pairs is what is planned", where=("samples",))
        if not _is_count(samples, 1):
            raise EvidenceError("a whole number from 1 up is expected", where=("samples",))
        if design == "duplicates" and samples < 2:
            raise EvidenceError("duplicates need two samples at least", where=("samples",))
    if values_per_sample is not None:
        if design == "agreement":
            raise EvidenceError("pairs are planned as single values", where=("values_per_sample",))
        if not _is_count(values_per_sample, 2):
            raise EvidenceError("a whole number from 2 up is expected", where=("values_per_sample",))


def _check_bias(bias: float, deviation: float, power: float, significance: float, between: float) -> None:
    if not (math.isfinite(bias) and bias != 0):
        raise EvidenceError("a finite bias other than 0 is expected", where=("bias",))
    if not 0 < deviation < math.inf:
        raise EvidenceError("a finite number above 0 is expected", where=("standard_deviation",))
    if not 0 < significance <= 0.5:
        raise EvidenceError("a probability above 0 and at most 0.5 is expected", where=("significance",))
    if not significance < power <= 0.9999:
        text = "a probability above the significance and at most 0.9999 is expected"
        raise EvidenceError(text, where=("power",))
    if not 0 <= between < math.inf:
        text = "a finite number from 0 up is expected"
        raise EvidenceError(text, where=("standard_deviation_between_groups",))
