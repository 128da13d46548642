"""Trials of a budget: every component's error drawn as it is averaged, then the measurement model.

An error that is known from finite degrees of freedom is drawn in two steps: a variance for each mean square,
from what its degrees of freedom leave open, then an error with the variances of this trial. For a component
of one mean square that is Student's t; components that share a mean square share its draw, so that what
cancels in the budget cancels in every trial.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from budgets.budget import Budget
from budgets.components import Component
from budgets.distributions import draws
from budgets.errors import ComponentError
from budgets.evidence.evaluation import MeanSquare, Term, merged, variance
from budgets.evidence.mean_square_matrices import MeanSquareMatrix
from budgets.joint_distributions import chi_square_ratios, root_of
from budgets.linear_propagation import CompiledPropagation, Line
from budgets.measurement_models import MeasurementModel
from budgets.propagation import Counts, compiled, estimates_for, group_shares
from budgets.reading_patterns import ReadingPattern
from budgets.trials import Trials, model_values

Array = NDArray[np.float64]
# A mean of more draws than this counts as normal: what is left of its excess is below a twentieth.
_MOST_SHARES = 30
_JOINTLY_NORMAL = "components that are correlated were drawn as jointly normal"


@dataclass(frozen=True)
class _Variances:
    """A variance as a sum over mean squares, drawn from what their degrees of freedom leave open."""

    constant: float
    varying: tuple[tuple[str, float], ...]

    @classmethod
    def of(cls, terms: Iterable[Term]) -> _Variances:
        single = merged(terms)
        known = [term for term in single if math.isinf(term.mean_square.degrees_of_freedom)]
        varying = [
            (term.mean_square.code, term.coefficient * term.mean_square.value)
            for term in single
            if term not in known and term.coefficient * term.mean_square.value != 0
        ]
        return cls(variance(known), tuple(varying))

    def ratios(self, drawn: Mapping[str, Array]) -> float | Array:
        """Return the variances over their estimate."""
        if not self.varying:
            return 1.0
        total: float | Array = self.constant
        for code, part in self.varying:
            total = total + part * drawn[code]
        # A difference may turn out below zero, when what is taken out is drawn large.
        return np.maximum(total, 0.0) / (self.constant + math.fsum(part for _, part in self.varying))


@dataclass(frozen=True)
class _NormalErrors:
    """Normal errors of quantities that go together, by one root of their covariance."""

    names: tuple[str, ...]
    root: Array
    variances: _Variances

    def add(
        self, values: dict[str, Array], drawn: Mapping[str, Array], generator: np.random.Generator
    ) -> None:
        size = len(values[self.names[0]])
        errors = generator.standard_normal((len(self.root), size))
        errors = self.root[0, 0] * errors if len(self.root) == 1 else self.root @ errors
        ratios = self.variances.ratios(drawn)
        if isinstance(ratios, np.ndarray):
            errors *= np.sqrt(ratios)
        for name, error in zip(self.names, errors, strict=True):
            values[name] += error


@dataclass(frozen=True)
class _ShapedErrors:
    """Errors of one component that is not normal: each of its shares in the mean is drawn."""

    name: str
    component: Component
    standard_uncertainty: float
    shares: tuple[float, ...]
    variances: _Variances

    def add(
        self, values: dict[str, Array], drawn: Mapping[str, Array], generator: np.random.Generator
    ) -> None:
        component, size = self.component, len(values[self.name])
        errors: float | Array = 0.0
        for share in self.shares:
            errors = errors + draws(
                component.distribution,
                share * self.standard_uncertainty,
                size,
                generator,
                top_to_base_ratio=component.top_to_base_ratio,
            )
        values[self.name] += errors * np.sqrt(self.variances.ratios(drawn))


def budget_trials(
    budget: Budget, counts: Counts | ReadingPattern, *, estimates: Mapping[str, float] | None = None
) -> Trials:
    """Return the trials of the measurand of a budget.

    Parameters
    ----------
    budget : Budget
    counts : Counts or ReadingPattern
        Not checked against the procedure here; see `Counts.check`.
    estimates : mapping of str to float or None
        As in `budgets.propagation.combined`; without a model and without parts proportional to the value
        None gives trials of the error alone.

    Returns
    -------
    Trials

    Raises
    ------
    ModelError
        If estimates are needed and missing.
    ComponentError
        If the variances of a group of components are not above zero.

    Notes
    -----
    Source: JCGM 101:2008, 6.4.8, 6.4.9 and 7.3 (from memory); of shared mean squares own derivation:
    sigma^2 is drawn as nu MS/chi^2 once for each, and normal errors that are added are normal with the sum
    of their variances. Quantities that share a mean square, a component or a correlation are drawn together;
    there the variances of a trial scale the covariance as they scale its part in the measurand.
    """
    law = compiled(budget, counts)
    full = law.model.estimates(estimates_for(budget, estimates))
    correlated = {code for item in law.correlations for code in item.between}
    shaped: list[_ShapedErrors] = []
    normal: list[Line] = []
    remarks: tuple[str, ...] = ()
    for component, line in zip(budget.components, law.lines, strict=True):
        # No averaging of readings touches what is given.
        shares = (1.0,) if line.inputs[0] in law.model.given else group_shares(counts, component.level)
        if line.weight == 0:
            continue
        if component.distribution == "normal" or line.matrix_terms:
            normal.append(line)
        elif component.code in correlated:
            normal.append(line)
            remarks = (_JOINTLY_NORMAL,)
        elif len(shares) > _MOST_SHARES:
            normal.append(line)
        else:
            shaped.append(_shaped(component, line, shares, full))
    groups = [_normal(law, lines, full) for lines in _that_go_together(law, normal)]
    sources: list[_NormalErrors | _ShapedErrors] = [*groups, *shaped]
    varying = [item for source in sources for item in source.variances.varying]
    freedoms = {code: square.degrees_of_freedom for code, square in _mean_squares(law).items()}
    heaviest = min((freedoms[code] for code, part in varying if part > 0), default=math.inf)
    codes = {code: freedoms[code] for code, _ in varying}
    return Trials(_drawing(law.model, full, codes, sources), heaviest, remarks)


def _drawing(
    model: MeasurementModel,
    estimates: Mapping[str, float],
    freedoms: Mapping[str, float],
    sources: Sequence[_NormalErrors | _ShapedErrors],
) -> Callable[[np.random.Generator, int], Array]:
    def draw(generator: np.random.Generator, size: int) -> Array:
        drawn = {code: chi_square_ratios(nu, size, generator) for code, nu in freedoms.items()}
        values = {name: np.full(size, estimate) for name, estimate in estimates.items()}
        for source in sources:
            source.add(values, drawn, generator)
        return model_values(model, values)

    return draw


def _shaped(
    component: Component, line: Line, shares: tuple[float, ...], estimates: Mapping[str, float]
) -> _ShapedErrors:
    terms = line.terms_at({line.inputs[0]: 1.0}, estimates)
    # What another component covers, or a small population leaves out, is taken off each share alike.
    left = math.sqrt(line.weight / math.fsum(share**2 for share in shares))
    return _ShapedErrors(
        line.inputs[0],
        component,
        left * math.sqrt(variance(terms)),
        shares,
        _Variances.of(terms),
    )


def _normal(law: CompiledPropagation, lines: Sequence[Line], estimates: Mapping[str, float]) -> _NormalErrors:
    codes = {line.code for line in lines}
    within = tuple(item for item in law.correlations if set(item.between) <= codes)
    own = CompiledPropagation(law.model, tuple(lines), within)
    names = tuple(name for name in law.model.names if any(name in line.inputs for line in lines))
    places = [law.model.names.index(name) for name in names]
    covariance = own.input_covariance(estimates)[np.ix_(places, places)]
    try:
        _, terms, _ = own.combination(law.model.linearised(estimates)[1], estimates)
    except ComponentError:
        # They do not move the measurand to first order: their variances are scaled by their sum.
        once = dict.fromkeys(law.model.names, 1.0)
        _, terms, _ = CompiledPropagation(law.model, tuple(lines)).combination(once, estimates)
    return _NormalErrors(names, root_of(covariance), _Variances.of(terms))


def _that_go_together(law: CompiledPropagation, lines: Sequence[Line]) -> list[list[Line]]:
    """Part lines into groups that share no quantity, no mean square and no correlation."""
    groups: list[tuple[set[str], list[Line]]] = []
    for line in lines:
        marks = {f"quantity {name}" for name in line.inputs}
        marks |= {f"mean square {code}" for code in _mean_squares_of(line)}
        marks |= {
            f"correlation {index}" for index, item in enumerate(law.correlations) if line.code in item.between
        }
        joined = [group for group in groups if group[0] & marks]
        groups = [group for group in groups if group not in joined]
        groups.append(
            (marks.union(*(group[0] for group in joined)), [*(x for g in joined for x in g[1]), line])
        )
    return [members for _, members in groups]


def _mean_squares_of(line: Line) -> dict[str, MeanSquare | MeanSquareMatrix]:
    found: dict[str, MeanSquare | MeanSquareMatrix] = {
        term.mean_square.code: term.mean_square for term in (*line.terms, *line.relative_terms)
    }
    return found | {term.mean_square.code: term.mean_square for term in line.matrix_terms}


def _mean_squares(law: CompiledPropagation) -> dict[str, MeanSquare | MeanSquareMatrix]:
    return {code: square for line in law.lines for code, square in _mean_squares_of(line).items()}
