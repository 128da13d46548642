"""What can be changed about a measurement: more readings, a better component, another budget.

A change says what it touches, makes another measurement of one, and has a remark that always goes with it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import ClassVar

from budgets.budget import Budget
from budgets.components import Component
from budgets.errors import ComponentError, LimitsError, ProcedureError
from budgets.evidence.evaluation import MeanSquare, Term, variance
from budgets.lot_procedures import Demand, LotProcedure
from budgets.measurement_errors import COMMON_LEVELS


@dataclass(frozen=True)
class Measuring:
    """A budget, what is done at every look, and what the lots must meet."""

    budget: Budget
    procedure: LotProcedure
    demands: tuple[Demand, ...]


@dataclass(frozen=True)
class ChangedLooks:
    """Other numbers of samples, readings, increments or looks; None leaves a number as it is.

    Parameters
    ----------
    samples, readings_per_sample, increments_per_sample, looks : int or None
    """

    remark: ClassVar[str] = ""

    samples: int | None = None
    readings_per_sample: int | None = None
    increments_per_sample: int | None = None
    looks: int | None = None

    @property
    def touches(self) -> frozenset[str]:
        """What the change is about: two changes of the same thing exclude each other."""
        return frozenset(name for name, value in vars(self).items() if value is not None)

    def made(self, measuring: Measuring) -> Measuring:
        """Return the measurement after the change.

        Raises
        ------
        ProcedureError
            If nothing is changed, or more looks are asked for than the decision rules plan.
        """
        given = {name: value for name, value in vars(self).items() if value is not None}
        if not given:
            raise ProcedureError("the option changes no number", where=("samples",))
        if self.looks is not None and self.looks > measuring.procedure.looks:
            raise ProcedureError(
                f"the decision rules plan {measuring.procedure.looks} looks; more of them change the rule, "
                "which is agreed with the customer",
                where=("looks",),
            )
        demands = measuring.demands
        if self.looks is not None:
            demands = tuple(_with_rounds(demand, self.looks) for demand in demands)
        return Measuring(measuring.budget, replace(measuring.procedure, **given), demands)


@dataclass(frozen=True)
class ChangedComponent:
    """A component of the budget replaced by a better one.

    Parameters
    ----------
    component : str
        Code of the line.
    standard_uncertainty : float or None, unit of the component
        Of one draw, after the change.
    factor : float or None
        On its standard uncertainty; one of the two is given.
    degrees_of_freedom : float or None
        After the change; None keeps the evidence's own.
    """

    remark: ClassVar[str] = ""

    component: str
    standard_uncertainty: float | None = None
    factor: float | None = None
    degrees_of_freedom: float | None = None

    @property
    def touches(self) -> frozenset[str]:
        """What the change is about."""
        return frozenset({f"component {self.component}", "lines"})

    def made(self, measuring: Measuring) -> Measuring:
        """Return the measurement after the change.

        Raises
        ------
        ComponentError
            If there is no such line, not one of the two figures is given, or it has no one figure.
        """
        line = component_of(measuring.budget, self.component)
        if (self.standard_uncertainty is None) == (self.factor is None):
            raise ComponentError(
                "give the standard uncertainty after the change, or a factor on it; one of the two",
                where=("standard_uncertainty",),
            )
        factor = self.factor
        if factor is None:
            if line.relative_terms or not line.terms:
                raise ComponentError(
                    f"{self.component} has no one standard uncertainty: give a factor on it",
                    where=("standard_uncertainty",),
                )
            assert self.standard_uncertainty is not None  # one of the two
            factor = self.standard_uncertainty / line.standard_uncertainty
        if not (math.isfinite(factor) and factor > 0):
            raise ComponentError("a standard uncertainty stays above 0", where=("standard_uncertainty",))
        made = _with_terms(line, factor * factor, self.degrees_of_freedom)
        return replace(measuring, budget=_with_line(measuring.budget, made))


@dataclass(frozen=True)
class CorrectedBias:
    """The bias is taken off the reading instead of widening the guard band."""

    remark: ClassVar[str] = ""

    @property
    def touches(self) -> frozenset[str]:
        """What the change is about."""
        return frozenset({"bias", "lines"})

    def made(self, measuring: Measuring) -> Measuring:
        """Return the measurement after the change.

        Raises
        ------
        ComponentError
            If the bias is corrected already, or there is none.
        """
        budget = measuring.budget
        if budget.bias is None or budget.bias_treatment == "corrected":
            raise ComponentError("the budget has no bias that is left uncorrected", where=("kind",))
        return replace(measuring, budget=replace(budget, bias_treatment="corrected"))


@dataclass(frozen=True)
class ReferenceDeterminations:
    """More determinations by the reference method for every pair of the validation.

    Parameters
    ----------
    component : str
        Line of the bias that the validation gave.
    standard_deviation : float, unit of the characteristic
        Of single determinations: repeatability of the reference method.
    determinations : int
        For each pair, after the change.
    instead_of : int
        For each pair, now.
    pairs : int
        Of the validation.
    """

    remark: ClassVar[str] = (
        "The reference method's noise is in no reading: this makes only the bias better known, and the "
        "remainder, which is what the noise leaves of a scatter, more certain."
    )

    component: str
    standard_deviation: float
    determinations: int
    instead_of: int
    pairs: int

    @property
    def touches(self) -> frozenset[str]:
        """What the change is about."""
        return frozenset({f"component {self.component}", "lines"})

    def made(self, measuring: Measuring) -> Measuring:
        """Return the measurement after the change.

        Raises
        ------
        ComponentError
            If the numbers are not possible, the line is drawn anew with every lot, or the noise said to be in
            it is more than the line.

        Notes
        -----
        The mean difference of n pairs loses ``s_ref^2 (1/m - 1/m')/n`` of its variance. Source: variance of a
        mean; what is taken out of a standard error of prediction stays as it is.
        """
        if not (1 <= self.instead_of <= self.determinations and self.pairs >= 2):
            raise ComponentError(
                "more determinations than now, of at least 2 pairs, are an improvement",
                where=("determinations",),
            )
        line = component_of(measuring.budget, self.component)
        if line.level not in COMMON_LEVELS:
            raise ComponentError(
                f"{self.component} is drawn anew at the level {line.level!r}; the noise of the reference is "
                "in no reading; name the line of the bias",
                where=("component",),
            )
        less = self.standard_deviation**2 * (1 / self.instead_of - 1 / self.determinations) / self.pairs
        own = variance(line.terms)
        if not (math.isfinite(less) and 0 <= less < own):
            raise ComponentError(
                f"{self.component} has a standard uncertainty of {math.sqrt(own):.4g}; single determinations "
                f"with {self.standard_deviation:.4g} would account for more than that",
                where=("standard_deviation",),
            )
        made = _with_terms(line, 1 - less / own, None)
        return replace(measuring, budget=_with_line(measuring.budget, made))


@dataclass(frozen=True)
class ChangedBudget:
    """Another budget: another analyzer, method or calibration, or a version that is drafted.

    Parameters
    ----------
    budget : Budget
    """

    remark: ClassVar[str] = ""

    budget: Budget

    @property
    def touches(self) -> frozenset[str]:
        """What the change is about: with it no line of the old budget is left to be changed."""
        return frozenset({"lines", "budget"})

    def made(self, measuring: Measuring) -> Measuring:
        """Return the measurement after the change."""
        return replace(measuring, budget=self.budget)


Change = ChangedLooks | ChangedComponent | CorrectedBias | ReferenceDeterminations | ChangedBudget


def go_together(one: Change, other: Change) -> bool:
    """Say whether two changes can be made both.

    Parameters
    ----------
    one, other : Change

    Returns
    -------
    bool
        Not where both change the same number or line, or one replaces the budget that the other changes.
    """
    if isinstance(one, ChangedBudget) or isinstance(other, ChangedBudget):
        return not one.touches & other.touches
    return not (one.touches - {"lines"}) & (other.touches - {"lines"})


def component_of(budget: Budget, code: str) -> Component:
    """Return a line of a budget by its code.

    Parameters
    ----------
    budget : Budget
    code : str

    Returns
    -------
    Component

    Raises
    ------
    LimitsError
        If there is none.
    """
    for component in budget.components:
        if component.code == code:
            return component
    known = ", ".join(component.code for component in budget.components)
    raise LimitsError(f"{code!r} is no component of the budget; there are {known}", where=("component",))


def _with_rounds(demand: Demand, looks: int) -> Demand:
    rule = demand.decision_rule
    return replace(demand, decision_rule=replace(rule, rounds=min(rule.rounds, looks)))


def _with_terms(line: Component, square: float, degrees_of_freedom: float | None) -> Component:
    """Return a line with its variance multiplied; new evidence has a mean square of its own."""

    def changed(terms: tuple[Term, ...], kind: str) -> tuple[Term, ...]:
        if degrees_of_freedom is None or not terms:
            return tuple(Term(square * term.coefficient, term.mean_square) for term in terms)
        new = MeanSquare(f"improvement/{line.code}/{kind}", square * variance(terms), degrees_of_freedom)
        return (Term(1.0, new),)

    return replace(
        line, terms=changed(line.terms, "constant"), relative_terms=changed(line.relative_terms, "relative")
    )


def _with_line(budget: Budget, line: Component) -> Budget:
    lines = tuple(line if item.code == line.code else item for item in budget.components)
    return replace(budget, components=lines)
