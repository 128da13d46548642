"""What an evaluation of evidence gives: variances as sums over independent mean squares.

Two estimates of one study, or estimates of two studies that both used a third, share mean squares. A budget
can only know this when every variance says which mean squares it is made of, so an estimate carries
``variance = sum of coefficient * mean square`` and never a bare standard uncertainty.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
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


@dataclass(frozen=True)
class Interval:
    """A coverage or confidence interval and the method that gave it."""

    lower: float
    upper: float
    probability: float
    method: str


@dataclass(frozen=True)
class EvaluationWarning:
    """A warning in words, with a code that stays the same."""

    code: str
    detail: str


@dataclass(frozen=True)
class SetAside:
    """A row (counted from 0) left out of an evaluation on the caller's request, and why."""

    row: int
    reason: str


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
    # JCGM 100 G.2b: nu_eff = u^4 / sum (a_k MS_k)^2 / nu_k
    total = variance(single)
    spread = math.fsum(
        (term.coefficient * term.mean_square.value) ** 2 / term.mean_square.degrees_of_freedom
        for term in single
    )
    if spread == 0:
        return math.inf
    counted = [term for term in single if term.coefficient * term.mean_square.value != 0]
    # A single mean square keeps its own number to the last digit.
    return counted[0].mean_square.degrees_of_freedom if len(counted) == 1 else total * total / spread


@dataclass(frozen=True)
class Estimate:
    """One outcome of an evaluation.

    Parameters
    ----------
    name : str
        Such as ``repeatability``, ``bias``, ``remainder``.
    terms : tuple of Term
        The variance as a sum over independent mean squares.
    value : float or None
        The estimate itself where it has one (a bias).
    interval : Interval or None
        Of the value where there is one, else of the standard deviation, clipped at 0.
    may_feed : tuple of str
        Levels at which it may stand in a budget; the first is the default.
    usable : bool
        False for an honest zero: shown, but no component can be made of it.
    covered_weight : float
        Averaging weight that another estimate already contains.
    contains : tuple of str
        Sources inside it, for the search for double counting.
    taken_out : tuple of str
        Sources that were subtracted from it and that the budget therefore has to name again.
    reading_weight : float
        Mean of 1/(readings averaged) behind it; 1 when every value behind it was a single reading.
    """

    name: str
    terms: tuple[Term, ...]
    value: float | None
    interval: Interval | None
    may_feed: tuple[str, ...]
    usable: bool
    covered_weight: float = 0.0
    contains: tuple[str, ...] = ()
    taken_out: tuple[str, ...] = ()
    reading_weight: float = 1.0

    @property
    def variance(self) -> float:
        """The variance, unit squared; negative when a difference of variances is."""
        return variance(self.terms)

    @property
    def standard_uncertainty(self) -> float | None:
        """The standard uncertainty; None when the variance is negative."""
        value = self.variance
        return math.sqrt(value) if value >= 0 else None

    @property
    def degrees_of_freedom(self) -> float:
        """Effective degrees of freedom; ``math.inf`` when known."""
        return effective_degrees_of_freedom(self.terms)

    def to_document(self) -> dict[str, Any]:
        """Return the estimate as JSON-able members; null stands for infinite degrees of freedom."""
        interval = self.interval
        return {
            "name": self.name,
            "value": self.value,
            "variance": self.variance,
            "standard_uncertainty": self.standard_uncertainty,
            "degrees_of_freedom": _finite(self.degrees_of_freedom),
            "terms": [_term_document(term) for term in self.terms],
            "interval": None
            if interval is None
            else {
                "lower": interval.lower,
                "upper": interval.upper,
                "probability": interval.probability,
                "method": interval.method,
            },
            "may_feed": list(self.may_feed),
            "usable": self.usable,
            "covered_weight": self.covered_weight,
            "contains": list(self.contains),
            "taken_out": list(self.taken_out),
            "reading_weight": self.reading_weight,
        }

    @classmethod
    def from_document(cls, document: Mapping[str, Any]) -> Estimate:
        """Return the estimate that `to_document` wrote."""
        interval = document["interval"]
        return cls(
            name=document["name"],
            terms=tuple(_term(term) for term in document["terms"]),
            value=document["value"],
            interval=None if interval is None else Interval(**interval),
            may_feed=tuple(document["may_feed"]),
            usable=document["usable"],
            covered_weight=document["covered_weight"],
            contains=tuple(document["contains"]),
            taken_out=tuple(document["taken_out"]),
            # Documents of the first version of this program lack it.
            reading_weight=document.get("reading_weight", 1.0),
        )


@dataclass(frozen=True)
class Evaluation:
    """The result of an evaluation of a study or of a declaration.

    Parameters
    ----------
    design : str
        Name of the study design, or ``declaration``.
    estimates : tuple of Estimate
    used : int
        Number of rows used.
    set_aside : tuple of SetAside
        Rows left out because the caller asked for it.
    diagnostics : mapping
        JSON-able; no NaN and no infinity.
    warnings : tuple of EvaluationWarning
    """

    design: str
    estimates: tuple[Estimate, ...]
    used: int
    set_aside: tuple[SetAside, ...] = ()
    diagnostics: Mapping[str, Any] = field(default_factory=dict)
    warnings: tuple[EvaluationWarning, ...] = ()

    def estimate(self, name: str | None = None) -> Estimate:
        """Return the estimate of that name.

        Parameters
        ----------
        name : str or None
            None asks for the only one.

        Returns
        -------
        Estimate

        Raises
        ------
        EvidenceError
            If there is none of that name, or no name was given and there are several.
        """
        if name is None and len(self.estimates) == 1:
            return self.estimates[0]
        for estimate in self.estimates:
            if estimate.name == name:
                return estimate
        names = ", ".join(estimate.name for estimate in self.estimates)
        asked = "which estimate is meant must be said" if name is None else f"there is no estimate {name!r}"
        raise EvidenceError(f"{asked}; this evaluation has: {names}", where=("estimate",))

    def to_document(self) -> dict[str, Any]:
        """Return the evaluation as a JSON-able document."""
        return {
            "design": self.design,
            "estimates": [estimate.to_document() for estimate in self.estimates],
            "used": self.used,
            "set_aside": [{"row": item.row, "reason": item.reason} for item in self.set_aside],
            "diagnostics": json_able(self.diagnostics),
            "warnings": [{"code": item.code, "detail": item.detail} for item in self.warnings],
        }

    @classmethod
    def from_document(cls, document: Mapping[str, Any]) -> Evaluation:
        """Return the evaluation that `to_document` wrote."""
        return cls(
            design=document["design"],
            estimates=tuple(Estimate.from_document(item) for item in document["estimates"]),
            used=document["used"],
            set_aside=tuple(SetAside(**item) for item in document["set_aside"]),
            diagnostics=document["diagnostics"],
            warnings=tuple(EvaluationWarning(**item) for item in document["warnings"]),
        )


def json_able(thing: Any) -> Any:
    """Return ``thing`` with tuples as lists, mappings as dicts and non-finite numbers as None."""
    if isinstance(thing, Mapping):
        return {str(key): json_able(value) for key, value in thing.items()}
    if isinstance(thing, (list, tuple)):
        return [json_able(value) for value in thing]
    if isinstance(thing, bool) or thing is None or isinstance(thing, (str, int)):
        return thing
    return _finite(float(thing))


def _finite(value: float) -> float | None:
    return value if math.isfinite(value) else None


def _term_document(term: Term) -> dict[str, Any]:
    square = term.mean_square
    return {
        "coefficient": term.coefficient,
        "mean_square": {
            "code": square.code,
            "value": square.value,
            "degrees_of_freedom": _finite(square.degrees_of_freedom),
        },
    }


def _term(document: Mapping[str, Any]) -> Term:
    square = document["mean_square"]
    freedom = square["degrees_of_freedom"]
    return Term(
        document["coefficient"],
        MeanSquare(square["code"], square["value"], math.inf if freedom is None else freedom),
    )
