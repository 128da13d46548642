"""Components: the lines of an uncertainty budget."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

from budgets.correlations import is_possible
from budgets.distributions import check_shape
from budgets.errors import ComponentError, EvidenceError, raise_collected
from budgets.evidence.evaluation import Estimate, Term, effective_degrees_of_freedom, merged, variance
from budgets.evidence.mean_square_matrices import MatrixTerm, covariance_of
from budgets.levels import LEVELS

__all__ = ["LEVELS", "Component"]


@dataclass(frozen=True)
class Component:
    """One source of uncertainty in a budget.

    Parameters
    ----------
    code : str
        Name of the line, unique in its budget.
    quantity : str
        Input quantity of the measurement model that it belongs to: the characteristic, or ``bias``.
    level : str
        One of ``LEVELS``: where the error is drawn anew.
    terms : tuple of Term
        Variance of ONE draw as a sum over independent mean squares.
    evaluation_type : {"A", "B"}
        Type of evaluation in the sense of the GUM.
    distribution : str
        Shape of the input distribution.
    covered_weight : float
        Averaging weight already contained in another component of the budget.
    contains : tuple of str
        Sources inside it.
    source : str
        Name of the estimate it was made from.
    taken_out : tuple of str
        Sources subtracted from it, to be named by other components.
    reading_weight : float
        Mean of 1/(readings averaged) behind it; 1 when every value behind it was a single reading.
    relative_terms : tuple of Term
        Variance of one draw of the relative error: ``u^2 = s0^2 + (s1 x)^2``.
    relative_to : str
        Quantity whose estimate x is meant; empty for the component's own.
    quantities : tuple of str
        Of a component of several quantities at once; ``quantity`` and ``terms`` are empty then.
    matrix_terms : tuple of MatrixTerm
        Covariance of one draw of those quantities.
    top_to_base_ratio : float or None
        Of a trapezoidal distribution.

    Raises
    ------
    ComponentError
        If a member is outside of what it may be, or the variance is not above zero.

    Notes
    -----
    Source: JCGM 100:2008, 2.3.2 and 2.3.3 (from memory) for Type A and Type B.
    """

    code: str
    quantity: str
    level: str
    terms: tuple[Term, ...]
    evaluation_type: str
    distribution: str = "normal"
    covered_weight: float = 0.0
    contains: tuple[str, ...] = ()
    source: str = ""
    taken_out: tuple[str, ...] = ()
    reading_weight: float = 1.0
    relative_terms: tuple[Term, ...] = ()
    relative_to: str = ""
    quantities: tuple[str, ...] = ()
    matrix_terms: tuple[MatrixTerm, ...] = ()
    top_to_base_ratio: float | None = None

    def __post_init__(self) -> None:
        if self.level not in LEVELS:
            raise ComponentError(
                f"component {self.code}: {self.level!r} is no level; the levels are {', '.join(LEVELS)}",
                where=("level",),
            )
        if self.evaluation_type not in ("A", "B"):
            raise ComponentError(
                f"component {self.code}: the evaluation is of Type A or of Type B, "
                f"not {self.evaluation_type!r}",
                where=("evaluation_type",),
            )
        try:
            check_shape(self.distribution, self.top_to_base_ratio)
        except ComponentError as error:
            raise ComponentError(f"component {self.code}: {error.message}", where=error.where) from error
        if not 0 <= self.covered_weight <= 1:
            raise ComponentError(
                f"component {self.code}: the covered weight {self.covered_weight} is not within 0 to 1",
                where=("covered_weight",),
            )
        self._check_variance()

    def _check_variance(self) -> None:
        if self.matrix_terms:
            self._check_matrix()
            return
        try:
            absolute = variance(merged(self.terms))
            relative = variance(merged(self.relative_terms))
        except EvidenceError as error:
            raise ComponentError(f"component {self.code}: {error.message}", where=("terms",)) from error
        finite = math.isfinite(absolute) and math.isfinite(relative)
        if not (finite and min(absolute, relative) >= 0 and absolute + relative > 0):
            raise ComponentError(
                f"component {self.code}: its variance is {absolute + relative:.6g}; a component needs "
                "a finite variance above zero (a difference of variances not above it proves nothing)",
                where=("terms",),
            )

    def _check_matrix(self) -> None:
        if self.terms or self.relative_terms or self.quantity:
            raise ComponentError(
                f"component {self.code}: it is of one quantity or of several, not both", where=("quantities",)
            )
        try:
            matrix = covariance_of(self.matrix_terms)
        except EvidenceError as error:
            raise ComponentError(
                f"component {self.code}: {error.message}", where=("matrix_terms",)
            ) from error
        if len(self.quantities) != len(matrix) or len(set(self.quantities)) != len(matrix):
            raise ComponentError(
                f"component {self.code}: the matrix has {len(matrix)} rows, one for each quantity",
                where=("quantities",),
            )
        if not is_possible(matrix) or not matrix.trace() > 0:
            raise ComponentError(
                f"component {self.code}: its covariance matrix is not positive semi-definite, or zero",
                where=("matrix_terms",),
            )

    @property
    def inputs(self) -> tuple[str, ...]:
        """The input quantities that the component belongs to."""
        return self.quantities if self.matrix_terms else (self.quantity,)

    @property
    def variance(self) -> float:
        """Variance of one draw, unit squared; without a part proportional to the value."""
        return variance(self.terms)

    @property
    def standard_uncertainty(self) -> float:
        """Standard uncertainty of one draw, in the unit of the characteristic."""
        return math.sqrt(self.variance)

    @property
    def degrees_of_freedom(self) -> float:
        """Degrees of freedom of one draw; ``math.inf`` when known."""
        return effective_degrees_of_freedom(self.terms or self.relative_terms)

    @classmethod
    def from_estimate(
        cls,
        code: str,
        quantity: str,
        level: str | None,
        estimate: Estimate,
        evaluation_type: str,
        *,
        distribution: str | None = None,
        relative_to: str = "",
        quantities: Mapping[str, str] | None = None,
    ) -> Component:
        """Return the component that an estimate feeds.

        Parameters
        ----------
        code, quantity : str
            As in `Component`.
        level : str or None
            None takes the default level of the estimate.
        estimate : Estimate
        evaluation_type : {"A", "B"}
        distribution : str or None
            None takes that of the estimate.
        relative_to : str
        quantities : mapping of str to str or None
            For an estimate of several quantities: what a column of its study is called in the model, where
            that differs. ``quantity`` is passed over then.

        Returns
        -------
        Component

        Raises
        ------
        ComponentError
            If the estimate is not usable, may not feed this level, or has not what is said of it.
        """
        if not estimate.may_feed:
            raise ComponentError(
                f"component {code}: the estimate {estimate.name!r} describes the process and is no error of "
                "a measurement",
                where=("evidence", "estimate"),
            )
        if not estimate.usable:
            raise ComponentError(
                f"component {code}: the estimate {estimate.name!r} is shown but not usable, because it is "
                "not significantly above zero; an honest zero is not a usable standard uncertainty",
                where=("evidence", "estimate"),
            )
        chosen = estimate.may_feed[0] if level is None else level
        if chosen not in estimate.may_feed:
            raise ComponentError(
                f"component {code}: the estimate {estimate.name!r} may feed the level "
                f"{' or '.join(estimate.may_feed)}, not {chosen!r}",
                where=("level",),
            )
        if relative_to and not estimate.relative_terms:
            raise ComponentError(
                f"component {code}: the estimate {estimate.name!r} is not relative to anything",
                where=("relative_to",),
            )
        return cls(
            code=code,
            quantity="" if estimate.matrix_terms else quantity,
            level=chosen,
            terms=estimate.terms,
            evaluation_type=evaluation_type,
            distribution=estimate.distribution if distribution is None else distribution,
            covered_weight=estimate.covered_weight,
            contains=estimate.contains,
            source=estimate.name,
            taken_out=estimate.taken_out,
            reading_weight=estimate.reading_weight,
            relative_terms=estimate.relative_terms,
            relative_to=relative_to,
            quantities=_named(code, estimate, quantities or {}),
            matrix_terms=estimate.matrix_terms,
            top_to_base_ratio=estimate.top_to_base_ratio if distribution is None else None,
        )


def _named(code: str, estimate: Estimate, quantities: Mapping[str, str]) -> tuple[str, ...]:
    if not estimate.matrix_terms:
        return ()
    columns = estimate.matrix_terms[0].mean_square.quantities
    raise_collected(
        [
            ComponentError(
                f"component {code}: {column!r} is no column of its study; there are {', '.join(columns)}",
                where=("quantities", column),
            )
            for column in quantities
            if column not in columns
        ]
    )
    return tuple(quantities.get(name, name) for name in columns)
