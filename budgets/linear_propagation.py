"""The law of propagation compiled for one budget and one pattern of readings.

What does not depend on the estimates is computed once: weights, mean squares, correlations. What is left for
one set of estimates is the model with its derivatives and a sum over the components; for arrays of estimates
the same in one vectorised pass.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray

from budgets.components import Component
from budgets.correlations import Correlation, correlation_matrix
from budgets.errors import ComponentError, ModelError
from budgets.evidence.evaluation import Term, effective_degrees_of_freedom, variance
from budgets.evidence.mean_square_matrices import MatrixTerm, covariance_of, projected
from budgets.measurement_models import MeasurementModel

_NOTHING_LEFT = 1e-14


@dataclass(frozen=True)
class Line:
    """A component ready to be combined.

    Parameters
    ----------
    code : str
    inputs : tuple of str
    weight : float
        Averaging weight of its level, less what another component covers.
    terms, relative_terms : tuple of Term
    relative_to : str
    matrix_terms : tuple of MatrixTerm
    """

    code: str
    inputs: tuple[str, ...]
    weight: float
    terms: tuple[Term, ...] = ()
    relative_terms: tuple[Term, ...] = ()
    relative_to: str = ""
    matrix_terms: tuple[MatrixTerm, ...] = ()

    @classmethod
    def of(cls, component: Component, weight: float) -> Line:
        """Return the line of a component."""
        return cls(
            component.code,
            component.inputs,
            max(0.0, weight - component.covered_weight),
            component.terms,
            component.relative_terms,
            component.relative_to or component.inputs[0],
            component.matrix_terms,
        )

    def terms_at(self, coefficients: Mapping[str, float], estimates: Mapping[str, float]) -> list[Term]:
        """Return the variance that the line gives the measurand, one draw of it, over its mean squares."""
        if self.matrix_terms:
            c = [coefficients[name] for name in self.inputs]
            return [projected(term, c) for term in self.matrix_terms]
        # A product, which becomes infinite where a power would raise; `combination` refuses it.
        square = coefficients[self.inputs[0]] * coefficients[self.inputs[0]]
        found = [Term(square * term.coefficient, term.mean_square) for term in self.terms]
        if self.relative_terms:
            # u^2 = s0^2 + (s1 x)^2
            square *= estimates[self.relative_to] * estimates[self.relative_to]
            found += [Term(square * term.coefficient, term.mean_square) for term in self.relative_terms]
        return found


class Propagated(NamedTuple):
    """An estimate of the measurand with its combined standard uncertainty."""

    estimate: float
    variance: float
    standard_uncertainty: float
    effective_degrees_of_freedom: float


class PropagatedMany(NamedTuple):
    """Many estimates of the measurand; arrays of one shape."""

    estimates: NDArray[np.float64]
    standard_uncertainties: NDArray[np.float64]
    effective_degrees_of_freedom: NDArray[np.float64]


@dataclass(frozen=True)
class CompiledPropagation:
    """The law of propagation with everything that does not depend on the estimates.

    Parameters
    ----------
    model : MeasurementModel
    lines : tuple of Line
    correlations : tuple of Correlation
        Between lines of one quantity each.
    """

    model: MeasurementModel
    lines: tuple[Line, ...]
    correlations: tuple[Correlation, ...] = ()

    def __post_init__(self) -> None:
        correlated = {code for item in self.correlations for code in item.between}
        places = [index for index, line in enumerate(self.lines) if line.code in correlated]
        matrix = correlation_matrix([self.lines[index].code for index in places], self.correlations)
        object.__setattr__(self, "_places", places)
        object.__setattr__(self, "_matrix", matrix)

    def at(self, estimates: Mapping[str, float]) -> Propagated:
        """Return estimate, combined standard uncertainty and effective degrees of freedom.

        Parameters
        ----------
        estimates : mapping of str to float
            Of the quantities that are read (means over the readings); given ones to ask "what if".

        Returns
        -------
        Propagated

        Raises
        ------
        ModelError
            If the model has no value or derivative there.
        ComponentError
            If the combined variance is not above zero.

        Notes
        -----
        Source: JCGM 100:2008, 5.1.2, eq. (10), 5.2.2, eq. (16), and G.4.1, eq. (G.2b) (from memory). The mean
        of the readings comes first, then the model.
        """
        full = self.model.estimates(estimates)
        value, coefficients = self.model.linearised(full)
        total, terms, _ = self.combination(coefficients, full)
        return Propagated(value, total, math.sqrt(total), effective_degrees_of_freedom(terms))

    def combination(
        self, coefficients: Mapping[str, float], estimates: Mapping[str, float]
    ) -> tuple[float, list[Term], list[float]]:
        """Return the combined variance, its derivative terms, and the part of every line.

        Parameters
        ----------
        coefficients : mapping of str to float
            Sensitivity coefficients.
        estimates : mapping of str to float

        Returns
        -------
        tuple
            Variance; terms ``(d u_c^2 / d MS_k) MS_k`` over the mean squares, and the parts of the lines;
            both add up to the variance (with correlations a part may be negative).

        Raises
        ------
        ComponentError
            If the combined variance is not above zero, or not finite.

        Notes
        -----
        With fixed correlations ``nu_eff = u_c^4 / sum (c_i u_i g_i)^2/nu_i``, ``g_i = sum_j r_ij c_j u_j``.
        Source: JCGM 100:2008, G.4.1 (from memory), carried over to a quadratic form; no published clause.
        """
        each = [
            [
                Term(line.weight * term.coefficient, term.mean_square)
                for term in line.terms_at(coefficients, estimates)
            ]
            for line in self.lines
        ]
        parts = [math.fsum(t.coefficient * t.mean_square.value for t in terms) for terms in each]
        places: list[int] = self.__dict__["_places"]
        if places:
            # s_i = c_i sqrt(W_i) u_i, signed; G_i = sum_j r_ij s_j; u_c^2 = sum s_i G_i
            signed = np.array(
                [
                    math.copysign(math.sqrt(max(0.0, parts[i])), coefficients[self.lines[i].inputs[0]])
                    for i in places
                ]
            )
            gathered = self.__dict__["_matrix"] @ signed
            for i, own, whole in zip(places, signed, gathered, strict=True):
                factor = float(whole / own) if own else 0.0
                each[i] = [Term(factor * t.coefficient, t.mean_square) for t in each[i]]
                parts[i] = float(own * whole)
        if not all(map(math.isfinite, parts)):
            raise ComponentError(
                "at these estimates the combined variance is too large to be computed", where=("components",)
            )
        total = math.fsum(parts)
        # What is left of correlated parts that cancel to the last digits is their rounding.
        if not total > _NOTHING_LEFT * math.fsum(map(abs, parts)):
            raise ComponentError(
                f"the combined variance is {total:.3g}: at these estimates no component moves the measurand, "
                "or their correlations cancel; terms of second order may be what is left",
                where=("components",),
            )
        return total, [term for terms in each for term in terms], parts

    def input_covariance(self, estimates: Mapping[str, float]) -> NDArray[np.float64]:
        """Return the covariance matrix of the input quantities at their estimates.

        Parameters
        ----------
        estimates : mapping of str to float
            Of all quantities.

        Returns
        -------
        ndarray, shape (n, n)
            In the order of ``model.names``: the sum over the levels of covariance times averaging weight.
        """
        names = self.model.names
        total = np.zeros((len(names), len(names)))
        deviations: list[float] = []
        for line in self.lines:
            if line.matrix_terms:
                places = [names.index(name) for name in line.inputs]
                total[np.ix_(places, places)] += line.weight * covariance_of(line.matrix_terms)
                deviations.append(0.0)
                continue
            own = line.weight * variance(line.terms_at({line.inputs[0]: 1.0}, estimates))
            total[(names.index(line.inputs[0]),) * 2] += own
            deviations.append(math.sqrt(own))
        codes = [line.code for line in self.lines]
        for item in self.correlations:
            one, other = (codes.index(code) for code in item.between)
            i, j = (names.index(self.lines[k].inputs[0]) for k in (one, other))
            product = item.coefficient * deviations[one] * deviations[other]
            total[i, j] += product
            total[j, i] += product
        return total

    def at_many(
        self,
        estimates: Mapping[str, ArrayLike],
        *,
        uncertainty_factors: Mapping[str, ArrayLike] | None = None,
    ) -> PropagatedMany:
        """Return the same as `at` for arrays: "what if" in one call.

        Parameters
        ----------
        estimates : mapping of str to array_like
            Arrays that broadcast against each other.
        uncertainty_factors : mapping of str to array_like or None
            Code of a component to factors on its standard uncertainty (0 leaves it out, 0.5 halves it).

        Returns
        -------
        PropagatedMany

        Raises
        ------
        ModelError
            If the model fails somewhere, or a code is unknown or a factor negative.
        ComponentError
            If a combined variance is not above zero.
        """
        factors = {
            code: np.asarray(value, dtype=np.float64) for code, value in (uncertainty_factors or {}).items()
        }
        known = {line.code for line in self.lines}
        for code, factor in factors.items():
            if code not in known or not (factor >= 0).all() or not np.isfinite(factor).all():
                raise ModelError(
                    f"{code!r} is no component, or a factor on it is below 0",
                    where=("uncertainty_factors", code),
                )
        values, slopes = self.model.linearised_many(estimates)
        arrays: dict[str, Any] = {
            **self.model.given,
            **{k: np.asarray(v, dtype=float) for k, v in estimates.items()},
        }
        return self._combined_many(values, slopes, arrays, factors)

    def _combined_many(
        self,
        values: NDArray[np.float64],
        slopes: Mapping[str, NDArray[np.float64]],
        estimates: Mapping[str, Any],
        factors: Mapping[str, NDArray[np.float64]],
    ) -> PropagatedMany:
        shape = np.broadcast_shapes(values.shape, *(factor.shape for factor in factors.values()))
        each = [
            [
                (line.weight * factors.get(line.code, np.asarray(1.0)) ** 2 * c, code, nu)
                for c, code, nu in terms
            ]
            for line in self.lines
            for terms in [_terms_many(line, slopes, estimates)]
        ]
        parts: list[Any] = [sum(part for part, _, _ in terms) for terms in each]
        self._correlate_many(each, parts, slopes)
        total = np.broadcast_to(sum(parts), shape)
        if not ((total > 0) & np.isfinite(total)).all():
            raise ComponentError("a combined variance is not above zero, or infinite", where=("components",))
        gathered: dict[str, tuple[Any, float]] = {}
        for terms in each:
            for part, code, nu in terms:
                gathered[code] = (gathered[code][0] + part if code in gathered else part, nu)
        spread = sum(np.square(part) / nu for part, nu in gathered.values())
        with np.errstate(divide="ignore"):
            freedom = np.broadcast_to(np.square(total) / spread, shape)
        return PropagatedMany(np.broadcast_to(values, shape), np.sqrt(total), freedom)

    def _correlate_many(
        self, each: list[list[tuple[Any, str, float]]], parts: list[Any], slopes: Mapping[str, Any]
    ) -> None:
        places: list[int] = self.__dict__["_places"]
        signed = [
            np.copysign(np.sqrt(np.maximum(0.0, parts[i])), slopes[self.lines[i].inputs[0]]) for i in places
        ]
        for row, i in enumerate(places):
            coefficients = self.__dict__["_matrix"][row]
            whole = sum(r * s for r, s in zip(coefficients, signed, strict=True))
            factor = np.divide(whole, signed[row], out=np.zeros_like(whole), where=signed[row] != 0)
            each[i] = [(factor * part, code, nu) for part, code, nu in each[i]]
            parts[i] = signed[row] * whole


def _terms_many(
    line: Line, slopes: Mapping[str, Any], estimates: Mapping[str, Any]
) -> list[tuple[Any, str, float]]:
    """Return variance parts of one draw with the code and the degrees of freedom of their mean squares."""
    found: list[tuple[Any, str, float]] = []
    for matrix_term in line.matrix_terms:
        square = matrix_term.mean_square
        part: Any = 0.0
        for one, row in zip(line.inputs, square.value, strict=True):
            for other, value in zip(line.inputs, row, strict=True):
                part = part + slopes[one] * slopes[other] * value
        part = matrix_term.coefficient * np.maximum(0.0, part)
        found.append((part, square.code, square.degrees_of_freedom))
    if not line.matrix_terms:
        square_of_slope = np.square(slopes[line.inputs[0]])
        found += [_part(square_of_slope, term) for term in line.terms]
        if line.relative_terms:
            scaled = square_of_slope * np.square(estimates[line.relative_to])
            found += [_part(scaled, term) for term in line.relative_terms]
    return found


def _part(factor: Any, term: Term) -> tuple[Any, str, float]:
    square = term.mean_square
    return factor * (term.coefficient * square.value), square.code, square.degrees_of_freedom


def lines_of(
    components: Sequence[Component], weights: Mapping[str, float], given: Sequence[str]
) -> tuple[Line, ...]:
    """Return the lines of components.

    Parameters
    ----------
    components : sequence of Component
    weights : mapping of str to float
        Averaging weight of every level.
    given : sequence of str
        Quantities whose estimates stand fixed: no averaging of readings touches them.

    Returns
    -------
    tuple of Line
    """
    return tuple(
        Line.of(component, 1.0 if component.inputs[0] in given else weights[component.level])
        for component in components
    )
