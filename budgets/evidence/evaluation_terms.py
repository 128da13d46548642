"""Variances as sums over independent mean squares: the structure by which budgets know what is shared."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any

from budgets.errors import EvidenceError


@dataclass(frozen=True)
class MeanSquare:
    """One mean square; equal codes mean the same mean square.

    Parameters
    ----------
    code : str
        ``<study>/<name>``, unique in the plant.
    value : float, unit of the characteristic squared
    degrees_of_freedom : float
        ``math.inf`` where the figure counts as known.
    """

    code: str
    value: float
    degrees_of_freedom: float

    def __post_init__(self) -> None:
        if not (math.isfinite(self.value) and self.value >= 0):
            raise EvidenceError(f"mean square {self.code} is {self.value}, not a finite number from 0 up")
        if not self.degrees_of_freedom > 0:
            raise EvidenceError(f"mean square {self.code} has {self.degrees_of_freedom} degrees of freedom")


@dataclass(frozen=True)
class Term:
    """One term of a variance: a coefficient, which may be negative, times a mean square."""

    coefficient: float
    mean_square: MeanSquare


def merged(terms: Iterable[Term]) -> tuple[Term, ...]:
    """Add up the coefficients of equal mean squares.

    Parameters
    ----------
    terms : iterable of Term
        Terms in any order; the same mean square may occur several times.

    Returns
    -------
    tuple of Term
        One term per mean square, in order of first appearance; coefficients that cancel stay as 0.

    Raises
    ------
    EvidenceError
        If one code stands for two different mean squares.
    """
    coefficients: dict[str, float] = {}
    mean_squares: dict[str, MeanSquare] = {}
    for term in terms:
        code = term.mean_square.code
        if mean_squares.setdefault(code, term.mean_square) != term.mean_square:
            raise EvidenceError(f"two different mean squares are called {code}")
        coefficients[code] = coefficients.get(code, 0.0) + term.coefficient
    return tuple(Term(coefficients[code], mean_squares[code]) for code in mean_squares)


def variance(terms: Iterable[Term]) -> float:
    """Return the variance that a sum over mean squares stands for.

    Parameters
    ----------
    terms : iterable of Term

    Returns
    -------
    float, unit squared
        ``sum a_k MS_k``; may be negative for a difference of variances.
    """
    return math.fsum(term.coefficient * term.mean_square.value for term in terms)


def effective_degrees_of_freedom(terms: Iterable[Term]) -> float:
    """Return the effective degrees of freedom of a sum over independent mean squares.

    Parameters
    ----------
    terms : iterable of Term
        Equal mean squares are added up first, so what cancels does not count.

    Returns
    -------
    float
        ``math.inf`` when no part of the variance has finite degrees of freedom.

    Notes
    -----
    Source: JCGM 100:2008, G.4.1, eq. (G.2b) (from memory), applied to independent mean squares. The value is
    kept real; truncation to an integer is not done.

    Examples
    --------
    >>> sep = MeanSquare("v/sep", 0.09, 59)
    >>> ref = MeanSquare("d/ref", 0.02, 20)
    >>> rep = MeanSquare("r/rep", 0.04, 10)
    >>> terms = [Term(1, sep), Term(-1, ref), Term(-1, rep), Term(1, rep)]
    >>> round(effective_degrees_of_freedom(terms), 1)
    31.2
    """
    single = merged(terms)
    counted = [term for term in single if term.coefficient * term.mean_square.value != 0]
    if not counted:
        return math.inf
    if len(counted) == 1:
        # A single mean square keeps its own number to the last digit.
        return counted[0].mean_square.degrees_of_freedom
    parts = [term.coefficient * term.mean_square.value for term in counted]
    # Scaled by a power of two, which is exact: squares of variances leave the range of a double soon.
    exponent = max(math.frexp(part)[1] for part in parts)
    scaled = [math.ldexp(part, -exponent) for part in parts]
    # JCGM 100 G.2b: nu_eff = u^4 / sum (a_k MS_k)^2 / nu_k
    total = math.fsum(scaled)
    spread = math.fsum(
        part * part / term.mean_square.degrees_of_freedom for part, term in zip(scaled, counted, strict=True)
    )
    return math.inf if spread == 0 else total * total / spread


def finite_or_none(value: float) -> float | None:
    """Return a finite number as it is, another as None: JSON has no infinity."""
    return value if math.isfinite(value) else None


def term_document(term: Term) -> dict[str, Any]:
    """Return a term as JSON-able members; null stands for infinite degrees of freedom."""
    square = term.mean_square
    return {
        "coefficient": term.coefficient,
        "mean_square": {
            "code": square.code,
            "value": square.value,
            "degrees_of_freedom": finite_or_none(square.degrees_of_freedom),
        },
    }


def term_of(document: Mapping[str, Any]) -> Term:
    """Return the term that `term_document` wrote."""
    square = document["mean_square"]
    freedom = square["degrees_of_freedom"]
    return Term(
        document["coefficient"],
        MeanSquare(square["code"], square["value"], math.inf if freedom is None else freedom),
    )
