"""The bias of an analyzer against the reference method, and its standard uncertainty."""

from __future__ import annotations

import math
from collections.abc import Hashable, Mapping, Sequence
from dataclasses import dataclass

from scipy.special import fdtrc, stdtr

from budgets.evidence.evaluation import (
    Estimate,
    EvaluationWarning,
    Interval,
    MeanSquare,
    Term,
    variance,
)
from budgets.evidence.sums import CONFIDENCE, grouped, mean, sum_of_squares
from budgets.evidence.validation_pairs import Pair
from budgets.propagation import coverage_factor

_SIGNIFICANT = 0.05
# So few clusters seldom show how far they differ. Unless they differ less than chance alone makes them in
# seven of ten studies, nothing counts as known better than they know it; by the pairs alone 95 % intervals of
# a bias of two clusters would hold the truth in 87 to 90 % of studies only.
FEW_CLUSTERS = 4
_ALIKE = 0.7


@dataclass(frozen=True)
class BiasTest:
    """The paired t test of the bias."""

    estimate: Estimate
    statistic: float
    p_value: float
    basis: str


def bias_terms(
    differences: Sequence[float],
    square: MeanSquare,
    clusters: Mapping[str, Sequence[Hashable]],
    code: str,
) -> tuple[tuple[Term, ...], str]:
    """Return the variance of the mean difference, without the trueness of the reference.

    Parameters
    ----------
    differences : sequence of float, shape (n,), unit of the characteristic
    square : MeanSquare
        SEP^2, of the differences.
    clusters : dict of str to sequence, shape (n,)
        What each pair belongs to: its group, its run. Empty when nothing is known.
    code : str
        Of the study.

    Returns
    -------
    tuple of (tuple of Term, str)
        The terms, and what they were taken from: ``pairs`` or the name of a cluster.

    Notes
    -----
    ``u(b)^2 = s_c^2 sum n_i^2 / n^2 + s_w^2 / n`` with clusters of n_i pairs; for clusters of one size this
    is the mean square between clusters over n. Clusters that differ less than chance alone would make them
    count as none, and of several clusterings the one with the largest variance is taken. With two or three
    clusters the larger of the two variances has the degrees of freedom of the clusters, unless these are
    alike (F below its 30 % point). Source: JCGM 100:2008, H.5 (from memory), for the balanced case; the rule
    for few clusters is common practice, no source.
    """
    n = len(differences)
    best: tuple[tuple[Term, ...], str] = ((Term(1 / n, square),), "pairs")
    for name, keys in clusters.items():
        groups = list(grouped(keys, differences).values())
        k = len(groups)
        if not 1 < k < n:
            continue
        within = math.fsum(sum_of_squares(values) for values in groups)
        mean_within = MeanSquare(f"{code}/within_{name}s", within / (n - k), n - k)
        between = max(0.0, sum_of_squares(differences) - within)
        mean_between = MeanSquare(f"{code}/between_{name}s", between / (k - 1), k - 1)
        sizes = sum(len(values) ** 2 for values in groups)
        # Expected mean square between: s_w^2 + n0 s_c^2
        n0 = (n - sizes / n) / (k - 1)
        share = sizes / n**2 / n0
        terms: tuple[Term, ...] = (Term(share, mean_between), Term(1 / n - share, mean_within))
        if mean_between.value > mean_within.value and variance(terms) > variance(best[0]):
            best = (terms, name)
        # Without scatter within, the clusters were the larger variance already.
        elif (
            k < FEW_CLUSTERS
            and best[1] == "pairs"
            and not alike(mean_between.value / mean_within.value, k - 1, n - k)
        ):
            vouched = MeanSquare(f"{code}/pairs_of_few_{name}s", square.value, k - 1)
            best = ((Term(1 / n, vouched),), name)
    return best


def alike(ratio: float, between: float, within: float) -> bool:
    """Say whether clusters differ less than chance alone makes them in seven of ten studies.

    Parameters
    ----------
    ratio : float
        Mean square between clusters over that within.
    between, within : float
        Their degrees of freedom.

    Returns
    -------
    bool
    """
    return float(fdtrc(between, within, ratio)) >= _ALIKE


def bias_estimate(
    pairs: Sequence[Pair], square: MeanSquare, code: str, *, whole_run: tuple[Term, ...] = ()
) -> BiasTest:
    """Return the bias, its interval and its paired t test.

    Parameters
    ----------
    pairs : sequence of Pair
    square : MeanSquare
        SEP^2.
    code : str
        Of the study.
    whole_run : tuple of Term
        Variance of a run of the reference method where all pairs come from one: SEP does not hold it.

    Returns
    -------
    BiasTest

    Notes
    -----
    Source: ISO 12099:2017, on the bias and its confidence limits (from memory).
    """
    differences = [pair.difference for pair in pairs]
    clusters = {
        name: keys
        for name, keys in (("group", [pair.group for pair in pairs]), ("run", [pair.run for pair in pairs]))
        if keys[0] is not None
    }
    terms, basis = bias_terms(differences, square, clusters, code)
    value = mean(differences)
    estimate = Estimate(
        name="bias",
        terms=(*terms, *whole_run),
        value=value,
        interval=None,
        may_feed=("calibration",),
        usable=True,
        contains=("bias",),
    )
    u, nu = math.sqrt(estimate.variance), estimate.degrees_of_freedom
    reach = coverage_factor(CONFIDENCE, nu) * u
    statistic = value / u
    return BiasTest(
        estimate=Estimate(
            name=estimate.name,
            terms=estimate.terms,
            value=value,
            interval=Interval(value - reach, value + reach, CONFIDENCE, "t"),
            may_feed=estimate.may_feed,
            usable=True,
            contains=estimate.contains,
        ),
        statistic=statistic,
        p_value=min(1.0, 2 * float(stdtr(nu, -abs(statistic)))),
        basis=basis,
    )


def bias_warnings(test: BiasTest, pairs: Sequence[Pair]) -> tuple[EvaluationWarning, ...]:
    """Say whether the bias is significant, and that its uncertainty counts in both cases."""
    value, u = test.estimate.value or 0.0, math.sqrt(test.estimate.variance)
    figures = f"the bias {value:.3g} with standard uncertainty {u:.2g} (p = {test.p_value:.2g})"
    if test.p_value < _SIGNIFICANT:
        warnings = [
            EvaluationWarning(
                "bias-significant",
                f"{figures} is significant: correct it or put it into the guard band; its standard "
                "uncertainty is a component in both cases",
            )
        ]
    else:
        warnings = [
            EvaluationWarning(
                "bias-not-significant",
                f"{figures} is not significant, which does not show that it is zero: its standard "
                "uncertainty is a component in all cases",
            )
        ]
    if pairs[0].group is None:
        warnings.append(
            EvaluationWarning(
                "no-group-column",
                "nothing says which pairs belong to the same day or lot; if they come in clusters, the "
                "uncertainty of the bias is larger than shown",
            )
        )
    elif 1 < len({pair.group for pair in pairs}) < FEW_CLUSTERS:
        number = len({pair.group for pair in pairs})
        detail = f"{number} groups say little about how the bias varies from one to the next; take more"
        warnings.append(EvaluationWarning("few-groups-of-pairs", detail))
    elif len({pair.group for pair in pairs}) == 1:
        warnings.append(
            EvaluationWarning("one-group", "all pairs are of one group: how the bias varies is not known")
        )
    return tuple(warnings)
