"""What an evaluation of evidence gives: variances as sums over independent mean squares.

Two estimates of one study, or estimates of two studies that both used a third, share mean squares. A budget
can only know this when every variance says which mean squares it is made of, so an estimate carries
``variance = sum of coefficient * mean square`` and never a bare standard uncertainty.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from budgets.errors import EvidenceError
from budgets.evidence.evaluation_terms import (
    MeanSquare,
    Term,
    effective_degrees_of_freedom,
    finite_or_none,
    merged,
    term_document,
    term_of,
    variance,
)
from budgets.evidence.mean_square_matrices import MatrixTerm, matrix_term, matrix_term_document

__all__ = [
    "Estimate",
    "Evaluation",
    "EvaluationWarning",
    "Interval",
    "MeanSquare",
    "SetAside",
    "Term",
    "effective_degrees_of_freedom",
    "json_able",
    "merged",
    "variance",
]


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
    relative_terms : tuple of Term
        Variance of the relative error, to be multiplied by the square of the value.
    matrix_terms : tuple of MatrixTerm
        Covariance of several quantities, where the estimate is one of them jointly; ``terms`` is empty then.
    distribution : str
        Shape of the distribution of the error.
    top_to_base_ratio : float or None
        Of a trapezoidal distribution.
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
    relative_terms: tuple[Term, ...] = ()
    matrix_terms: tuple[MatrixTerm, ...] = ()
    distribution: str = "normal"
    top_to_base_ratio: float | None = None

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
        seldom: dict[str, Any] = {
            "relative_terms": [term_document(term) for term in self.relative_terms],
            "matrix_terms": [matrix_term_document(term) for term in self.matrix_terms],
            "distribution": None if self.distribution == "normal" else self.distribution,
            "top_to_base_ratio": self.top_to_base_ratio,
        }
        return {
            "name": self.name,
            "value": self.value,
            "variance": self.variance,
            "standard_uncertainty": self.standard_uncertainty,
            "degrees_of_freedom": finite_or_none(self.degrees_of_freedom),
            "terms": [term_document(term) for term in self.terms],
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
            # Only where there are any: most estimates are of one quantity, normal and of one size.
            **{name: member for name, member in seldom.items() if member not in (None, [])},
        }

    @classmethod
    def from_document(cls, document: Mapping[str, Any]) -> Estimate:
        """Return the estimate that `to_document` wrote."""
        interval = document["interval"]
        return cls(
            name=document["name"],
            terms=tuple(term_of(term) for term in document["terms"]),
            value=document["value"],
            interval=None if interval is None else Interval(**interval),
            may_feed=tuple(document["may_feed"]),
            usable=document["usable"],
            covered_weight=document["covered_weight"],
            contains=tuple(document["contains"]),
            taken_out=tuple(document["taken_out"]),
            # Documents of the first version of this program lack these.
            reading_weight=document.get("reading_weight", 1.0),
            relative_terms=tuple(term_of(term) for term in document.get("relative_terms", ())),
            matrix_terms=tuple(matrix_term(term) for term in document.get("matrix_terms", ())),
            distribution=document.get("distribution", "normal"),
            top_to_base_ratio=document.get("top_to_base_ratio"),
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
    return finite_or_none(float(thing))
