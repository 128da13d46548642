"""Which side of a replicated pair deviates: what its replicates say about a difference that stands out."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import asdict, dataclass
from typing import Any

from budgets.evidence.evaluation import EvaluationWarning
from budgets.evidence.sums import f_quantile, mean, sum_of_squares
from budgets.evidence.validation_pairs import Pair

_FAR = 2.0
_SIGNIFICANCE = 0.01

_ASK_THE_REFERENCE = "its reference replicates disagree: ask the reference again"
_NOISE = "its readings disagree: repeatability of the analyzer, or the sample was presented differently"
_BOTH = "the replicates of both sides disagree: the sample itself is in question"
_PERSISTS = (
    "the replicates of both sides agree and the difference persists: it is no repeatability; the sample, the "
    "calibration or the run of the reference is in question"
)
_CLUSTER = (
    "its readings agree with one another away from the reference: no repeatability of the analyzer; ask the "
    "reference, which has one value only, again"
)
_ONE_READING = "its reference replicates agree: read the sample again, which was read once only"
_UNKNOWN = "neither side has replicates: nothing says which side it is"

_SAYINGS = {
    ("disagree", "disagree"): _BOTH,
    ("disagree", "agree"): _NOISE,
    ("disagree", "none"): _NOISE,
    ("agree", "disagree"): _ASK_THE_REFERENCE,
    ("none", "disagree"): _ASK_THE_REFERENCE,
    ("agree", "agree"): _PERSISTS,
    ("agree", "none"): _CLUSTER,
    ("none", "agree"): _ONE_READING,
    ("none", "none"): _UNKNOWN,
}


@dataclass(frozen=True)
class DeviatingPair:
    """A pair whose difference stands out, and what its replicates say.

    Parameters
    ----------
    pair : str
    difference : float
        Mean reading less mean reference value, less the bias.
    readings, references : {"agree", "disagree", "none"}
        Whether the replicates of either side agree; ``none`` where there are none.
    saying : str
    """

    pair: str
    difference: float
    readings: str
    references: str
    saying: str

    def to_document(self) -> dict[str, Any]:
        """Return the pair as JSON-able members."""
        return asdict(self)


def deviating_pairs(pairs: Sequence[Pair], deviation: float) -> tuple[DeviatingPair, ...]:
    """Return the pairs more than two SEP away from the bias, with the side that deviates.

    Parameters
    ----------
    pairs : sequence of Pair
    deviation : float
        SEP.

    Returns
    -------
    tuple of DeviatingPair
        Empty when no pair has replicates.

    Notes
    -----
    The spread within a pair is held against that within all others by F at 1 %. That replicates agree while
    the difference is large speaks against repeatability; common practice, no source.
    """
    if all(len(pair.readings) == 1 and len(pair.references) == 1 for pair in pairs):
        return ()
    centre = mean([pair.difference for pair in pairs])
    of_readings = _spread([pair.readings for pair in pairs])
    of_references = _spread([pair.references for pair in pairs])
    found = []
    for pair in pairs:
        distance = pair.difference - centre
        if abs(distance) > _FAR * deviation:
            sides = _agreement(pair.readings, of_readings), _agreement(pair.references, of_references)
            found.append(DeviatingPair(pair.label, distance, *sides, _SAYINGS[sides]))
    return tuple(found)


def _spread(sides: Sequence[Sequence[float]]) -> tuple[float, int]:
    """Return the sum of squares within all pairs and its degrees of freedom."""
    return math.fsum(map(sum_of_squares, sides)), sum(len(values) - 1 for values in sides)


def _agreement(own: Sequence[float], of_all: tuple[float, int]) -> str:
    """Say whether the replicates of one pair agree as well as those of all the others do."""
    nu = len(own) - 1
    if nu == 0:
        return "none"
    squares = sum_of_squares(own)
    others, freedom = of_all[0] - squares, of_all[1] - nu
    if freedom == 0:
        # No other pair tells what agreement is, so none can be denied.
        return "agree"
    largest = f_quantile(_SIGNIFICANCE, nu, freedom) * nu * max(0.0, others) / freedom
    return "disagree" if squares > largest else "agree"


def deviation_warnings(found: Sequence[DeviatingPair]) -> tuple[EvaluationWarning, ...]:
    """Say, once for each kind, which pairs deviate and where to look."""
    kinds: dict[str, list[str]] = {}
    # One pair in twenty lies beyond two SEP by chance: without replicates that is no news.
    for item in found:
        if item.saying != _UNKNOWN:
            kinds.setdefault(item.saying, []).append(item.pair)
    return tuple(
        EvaluationWarning("pair-deviates", f"pair {', '.join(labels)}: {saying}")
        for saying, labels in kinds.items()
    )
