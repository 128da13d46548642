"""The remainder: what is left of the standard error of prediction without the sources that are known.

The standard error of prediction holds errors of the reference method and of the study's own replicates. What
the study says about them is taken out with the replicate numbers of the study.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from budgets.errors import BudgetsError, EvidenceError, raise_collected
from budgets.evidence.evaluation import (
    Estimate,
    Interval,
    MeanSquare,
    Term,
    effective_degrees_of_freedom,
    merged,
    variance,
)
from budgets.evidence.mean_square_intervals import variance_interval
from budgets.evidence.study_tables import NamedSource
from budgets.evidence.sums import CONFIDENCE, f_quantile
from budgets.evidence.validation_pairs import Pair, within_pairs

SOURCES = (
    "analyzer_repeatability",
    "presentation",
    "reference_repeatability",
    "reference_run",
    "subsampling",
)
NEEDED = ("analyzer_repeatability", "reference_repeatability")
# What the readings of one sample scatter by; any other error is averaged otherwise, or is not in them.
_REPEATABILITY = frozenset({"repeatability", "resolution"})
_BETWEEN_LABORATORIES = ("between_laboratories", "reproducibility")


@dataclass(frozen=True)
class Remainder:
    """A remainder, whether it may be used, and how that was found."""

    estimate: Estimate
    diagnostics: Mapping[str, Any]


def checked_sources(
    named: Sequence[NamedSource], pairs: Sequence[Pair], code: str
) -> dict[str, tuple[Term, ...]]:
    """Return the variance of one draw of every source that is known.

    Parameters
    ----------
    named : sequence of NamedSource
    pairs : sequence of Pair
        Their own replicates stand in for a repeatability that was not named.
    code : str
        Of the study.

    Returns
    -------
    dict of str to tuple of Term

    Raises
    ------
    EvidenceError
        If a source is unknown, named twice, unusable, made from a reproducibility limit, or needs a column
        that is missing.

    Notes
    -----
    All reference values of a study come from one laboratory, whose bias is constant there: it is in the bias
    and not in the standard error of prediction, so nothing between laboratories can be taken out of that.
    """
    sources: dict[str, tuple[Term, ...]] = {}
    faults: list[BudgetsError] = []
    for index, item in enumerate(named):
        fault = _fault(item, sources, pairs)
        if fault is None:
            sources[item.source] = item.estimate.terms
        else:
            faults.append(EvidenceError(fault, where=("named_sources", index)))
    raise_collected(faults)
    own = {
        "analyzer_repeatability": within_pairs([p.readings for p in pairs], f"{code}/readings_within_pairs"),
        "reference_repeatability": within_pairs(
            [p.references for p in pairs], f"{code}/references_within_pairs"
        ),
    }
    for name, square in own.items():
        if square is not None:
            sources.setdefault(name, (Term(1.0, square),))
    return sources


def _fault(item: NamedSource, sources: Mapping[str, object], pairs: Sequence[Pair]) -> str | None:
    estimate = item.estimate
    if item.source not in SOURCES:
        return f"{item.source!r} is no source that can be taken out; there are {', '.join(SOURCES)}"
    if item.source in sources:
        return f"{item.source} is named twice"
    if any(name in (estimate.name, *estimate.contains) for name in _BETWEEN_LABORATORIES):
        return (
            f"{item.source}: an estimate made from a reproducibility limit cannot be taken out, because the "
            "bias between laboratories is constant within a study and therefore not in its standard error "
            "of prediction; name the repeatability of the reference method"
        )
    if estimate.relative_terms:
        return (
            f"{item.source}: {estimate.name!r} depends on the level; name the figure pooled over the "
            "levels of the pairs"
        )
    if not estimate.usable or estimate.variance <= 0:
        return f"{item.source}: the estimate {estimate.name!r} is not usable"
    if beside := held_beside(item):
        return (
            f"{item.source}: {estimate.name!r} holds {', '.join(beside)} too, which would be taken out where "
            "it is not, or once more; name an estimate of the source alone"
        )
    if item.source == "reference_run" and pairs[0].run is None:
        return "reference_run: which pairs were measured in one run must be known (column run)"
    return None


def held_beside(item: NamedSource) -> tuple[str, ...]:
    """Return what an estimate holds beside the source that it is named for.

    Parameters
    ----------
    item : NamedSource

    Returns
    -------
    tuple of str
        Nothing for an estimate that may be taken out.

    Notes
    -----
    A repeatability goes by the number of readings, what presentations or runs differ by does not. So a
    repeatability is alone, and in no other source.
    """
    held = frozenset(item.estimate.contains)
    return tuple(sorted(held - _REPEATABILITY if item.source in NEEDED else held & _REPEATABILITY))


def run_share(pairs: Sequence[Pair]) -> float:
    """Return which part of the variance between runs SEP^2 holds.

    Parameters
    ----------
    pairs : sequence of Pair

    Returns
    -------
    float
        ``(n - sum n_i^2 / n) / (n - 1)`` with n_i pairs in run i; 1 for runs of one pair, 0 for one run.
    """
    n = len(pairs)
    sizes: dict[str | None, int] = {}
    for pair in pairs:
        sizes[pair.run] = sizes.get(pair.run, 0) + 1
    return (n - sum(size**2 for size in sizes.values()) / n) / (n - 1)


def subtracted_terms(
    sources: Mapping[str, tuple[Term, ...]], pairs: Sequence[Pair], presentations: int
) -> tuple[Term, ...]:
    """Return what the named sources contributed to SEP^2.

    Parameters
    ----------
    sources : mapping of str to tuple of Term
        Variances of one draw.
    pairs : sequence of Pair
    presentations : int
        How often the analyzer's side of a pair was presented anew.

    Returns
    -------
    tuple of Term
        Equal mean squares added up.
    """
    n = len(pairs)
    # Means of 1/n_i: exact for pairs with unequal numbers of replicates.
    weights = {
        "analyzer_repeatability": math.fsum(1 / len(pair.readings) for pair in pairs) / n,
        "presentation": 1 / presentations,
        "reference_repeatability": math.fsum(1 / len(pair.references) for pair in pairs) / n,
        "reference_run": run_share(pairs) if "reference_run" in sources else 0.0,
        "subsampling": 1.0,
    }
    return merged(
        Term(weights[name] * term.coefficient, term.mean_square)
        for name, terms in sources.items()
        for term in terms
    )


def remainder(square: MeanSquare, subtracted: tuple[Term, ...], sources: Mapping[str, object]) -> Remainder:
    """Return SEP^2 less the named sources, and whether that is significantly above zero.

    Parameters
    ----------
    square : MeanSquare
        SEP^2.
    subtracted : tuple of Term
    sources : mapping
        Names of the sources that were taken out.

    Returns
    -------
    Remainder
        Not usable unless ``SEP^2 / subtracted`` exceeds the 95 % point of F: an honest zero is shown with its
        interval, and the standard error of prediction is used whole.

    Notes
    -----
    Source: the F test of two variances, ISO 2854:1976 (from memory); the interval by the modified
    large-sample method, see `budgets.evidence.mean_square_intervals`.
    """
    terms = merged([Term(1.0, square), *(Term(-t.coefficient, t.mean_square) for t in subtracted)])
    taken = variance(subtracted)
    freedom = effective_degrees_of_freedom(subtracted)
    ratio = square.value / taken
    critical = f_quantile(1 - CONFIDENCE, square.degrees_of_freedom, freedom)
    lower, upper = variance_interval(terms)
    usable = ratio >= critical
    presentation = "presentation" in sources
    estimate = Estimate(
        name="remainder",
        terms=terms,
        value=None,
        interval=Interval(
            math.sqrt(max(0.0, lower)), math.sqrt(max(0.0, upper)), CONFIDENCE, "modified large-sample"
        ),
        may_feed=("lot", "sample"),
        usable=usable,
        contains=("remainder",) if presentation else ("remainder", "presentation"),
        taken_out=("repeatability", "presentation") if presentation else ("repeatability",),
    )
    diagnostics = {
        "remainder_variance": variance(terms),
        "remainder_variance_lower": lower,
        "remainder_variance_upper": upper,
        "subtracted_variance": taken,
        "subtracted_degrees_of_freedom": freedom,
        "subtracted_sources": list(sources),
        "f_statistic": ratio,
        "f_critical_value": critical,
        "remainder_significant": usable,
    }
    return Remainder(estimate, diagnostics)
