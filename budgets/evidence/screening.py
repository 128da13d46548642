"""Outlier tests that the designs share: Cochran's and Grubbs' tests.

They inform. Nothing is dropped because of them: a value at 5 % is a straggler, one at 1 % an outlier
(ISO 5725-2), and only an assignable cause lets somebody set it aside.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import asdict, dataclass
from functools import lru_cache
from typing import Any

import numpy as np
from scipy.special import stdtrit

from budgets.evidence.sums import f_quantile, mean, sum_of_squares

STRAGGLER, OUTLIER = 0.05, 0.01
_SIMULATIONS = 100_000
_SEED = 5725
_MOST_FOR_PAIRS = 100


@dataclass(frozen=True)
class Finding:
    """One outlier test that spoke.

    Parameters
    ----------
    test : str
    group : str
        Where.
    values : tuple of float
        The values in question; empty for a spread.
    statistic, critical_value : float
    grade : {"straggler", "outlier"}
    """

    test: str
    group: str
    values: tuple[float, ...]
    statistic: float
    critical_value: float
    grade: str

    def to_document(self) -> dict[str, Any]:
        """Return the finding as JSON-able members."""
        return {**asdict(self), "values": list(self.values)}


def cochran_critical_value(
    alpha: float, groups: int, degrees_of_freedom: float, other_degrees_of_freedom: float
) -> float:
    """Return the critical value of the share that one group has in the sum of squares of all.

    Parameters
    ----------
    alpha : float
        Significance level.
    groups : int
        Number of groups tested.
    degrees_of_freedom, other_degrees_of_freedom : float
        Of this group, and of all the others together.

    Returns
    -------
    float
        For groups of equal size, the critical value of Cochran's C.

    Notes
    -----
    Source: ISO 5725-2:1994, 7.3.3 and Table 4; for unequal sizes 't Lam, Analytica Chimica Acta 659 (2010)
    (from memory). F at ``alpha / groups`` is a close approximation.
    """
    f = f_quantile(alpha / groups, degrees_of_freedom, other_degrees_of_freedom)
    return 1 / (1 + other_degrees_of_freedom / (degrees_of_freedom * f))


def cochran_findings(groups: Sequence[tuple[str, Sequence[float]]]) -> list[Finding]:
    """Test whether one group scatters more than the others.

    Parameters
    ----------
    groups : sequence of (label, values)
        Groups with fewer than two values are passed over.

    Returns
    -------
    list of Finding
        One per group whose share is too large; with groups of unequal size each has its own limit.
    """
    tested = [(label, sum_of_squares(values), len(values) - 1) for label, values in groups if len(values) > 1]
    total = math.fsum(squares for _, squares, _ in tested)
    freedom = sum(number for _, _, number in tested)
    if len(tested) < 2 or total == 0:
        return []
    equal = len({number for _, _, number in tested}) == 1
    findings = []
    for label, squares, number in tested:
        share = squares / total
        limits = [
            cochran_critical_value(alpha, len(tested), number, freedom - number)
            for alpha in (STRAGGLER, OUTLIER)
        ]
        if share > limits[0]:
            grade, limit = ("outlier", limits[1]) if share > limits[1] else ("straggler", limits[0])
            name = "Cochran" if equal else "Cochran, generalised"
            findings.append(Finding(name, label, (), share, limit, grade))
    return findings


def grubbs_critical_value(alpha: float, number: int) -> float:
    """Return the critical value of Grubbs' test for one outlying value.

    Parameters
    ----------
    alpha : float
        Significance level, for an outlier on either side.
    number : int
        Number of values, at least 3.

    Returns
    -------
    float

    Notes
    -----
    Source: ISO 5725-2:1994, 7.3.4 and Table 5 (from memory): t at alpha/(2 p) with p - 2 degrees of freedom.
    """
    t = -float(stdtrit(number - 2, alpha / (2 * number)))
    return (number - 1) / math.sqrt(number) * math.sqrt(t * t / (number - 2 + t * t))


@lru_cache(maxsize=64)
def grubbs_pair_critical_values(number: int) -> tuple[float, float]:
    """Return the critical values of Grubbs' test for two outlying values on one side.

    Parameters
    ----------
    number : int
        Number of values, at least 4.

    Returns
    -------
    tuple of float
        At 5 % and at 1 %; a ratio below them speaks.

    Notes
    -----
    The statistic is the sum of squares without the two largest (or smallest) values over that of all; the
    level holds for both sides together. It has no closed distribution: the values are simulated, with a fixed
    seed, to about 1 % of themselves.
    Source: ISO 5725-2:1994, 7.3.4.2 and Table 5 (from memory).
    """
    generator = np.random.default_rng(_SEED)
    ratios = []
    block = max(1, 1_000_000 // number)
    for start in range(0, _SIMULATIONS, block):
        draws = np.sort(generator.standard_normal((min(block, _SIMULATIONS - start), number)), axis=1)
        kept = np.minimum(draws[:, :-2].var(axis=1), draws[:, 2:].var(axis=1))
        ratios.append(kept * (number - 2) / (draws.var(axis=1) * number))
    straggler, outlier = np.quantile(np.concatenate(ratios), [STRAGGLER, OUTLIER])
    return float(straggler), float(outlier)


def grubbs_findings(label: str, values: Sequence[float]) -> list[Finding]:
    """Test one group for an outlying value, and for two on the same side.

    Parameters
    ----------
    label : str
    values : sequence of float
        Fewer than 3 values cannot be tested, nor values of which all others are equal: there the display
        has hidden the scatter, not one value stood out. The test for two is made of up to 100 values: the
        published table ends at 40, and the simulation of larger ones would keep the user waiting.

    Returns
    -------
    list of Finding
    """
    number = len(values)
    squares = sum_of_squares(values)
    if number < 3 or squares == 0:
        return []
    centre = mean(values)
    extreme = max(values, key=lambda value: abs(value - centre))
    if len(set(values)) == 2 and min(values.count(value) for value in set(values)) == 1:
        return []
    statistic = abs(extreme - centre) / math.sqrt(squares / (number - 1))
    limits = [grubbs_critical_value(alpha, number) for alpha in (STRAGGLER, OUTLIER)]
    if statistic > limits[0]:
        grade, limit = ("outlier", limits[1]) if statistic > limits[1] else ("straggler", limits[0])
        return [Finding("Grubbs, one value", label, (extreme,), statistic, limit, grade)]
    # ISO 5725-2, 7.3.4: the test for two comes when the test for one is silent.
    return _pair_findings(label, sorted(values), squares) if 3 < number <= _MOST_FOR_PAIRS else []


def _pair_findings(label: str, ordered: Sequence[float], squares: float) -> list[Finding]:
    straggler, outlier = grubbs_pair_critical_values(len(ordered))
    findings = []
    for pair, rest in ((ordered[:2], ordered[2:]), (ordered[-2:], ordered[:-2])):
        ratio = sum_of_squares(rest) / squares
        if 0 < ratio < straggler:
            grade, limit = ("outlier", outlier) if ratio < outlier else ("straggler", straggler)
            findings.append(Finding("Grubbs, two values", label, tuple(pair), ratio, limit, grade))
    return findings
