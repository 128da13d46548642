"""What approval settles by Monte Carlo: whether the law of propagation holds, and what stands in for it.

The law is held against Monte Carlo runs for the fewest, the planned and the most readings, and at several
places where the uncertainty depends on the estimate. Where it holds at all of them, decisions use it. Where
it does not, they use the quantiles of the runs: for a characteristic that is computed from several quantities
only if one table speaks for the whole validated box.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from budgets.budget import Budget
from budgets.budget_trials import budget_trials
from budgets.error_distributions import Tabulated
from budgets.errors import ComponentError, ModelError
from budgets.linear_propagation import CompiledPropagation
from budgets.model_validation import grid_by_difference, validate_over_box
from budgets.monte_carlo import monte_carlo
from budgets.propagation import Counts, combined, compiled
from budgets.propagation_validation import SHAPE_TOLERANCE, PropagationValidation, validate
from budgets.reading_patterns import ReadingPattern

TABLE_TRIALS = 2**19
_TAIL = np.geomspace(2e-5, 0.5, 41)
PROBABILITIES: tuple[float, ...] = (*_TAIL.tolist(), *(1 - _TAIL[-2::-1]).tolist())


@dataclass(frozen=True)
class Place:
    """The law of propagation held against a run for these readings, at these estimates."""

    counts: Counts
    estimates: Mapping[str, float]
    validation: PropagationValidation


@dataclass(frozen=True)
class ErrorTables:
    """The quantiles that stand in for the law of propagation.

    Parameters
    ----------
    by_counts : mapping of Counts to Tabulated
        For the numbers of readings that were run.
    other : Tabulated
        For all others: the farthest of every quantile.
    """

    by_counts: Mapping[Counts, Tabulated]
    other: Tabulated

    def of(self, done: Counts | ReadingPattern) -> Tabulated:
        """Return the table for what was done.

        Parameters
        ----------
        done : Counts or ReadingPattern

        Returns
        -------
        Tabulated
        """
        return self.by_counts.get(done, self.other) if isinstance(done, Counts) else self.other

    def to_document(self) -> dict[str, Any]:
        """Return the tables as JSON-able members."""
        return {
            "by_counts": [
                {"readings_per_sample": list(counts.readings_per_sample), **table.to_document()}
                for counts, table in self.by_counts.items()
            ],
            "other": self.other.to_document(),
        }

    @classmethod
    def from_document(cls, document: Mapping[str, Any]) -> ErrorTables:
        """Return the tables that `to_document` wrote, to the last bit."""
        by_counts = {
            Counts(tuple(item["readings_per_sample"])): Tabulated.from_document(item)
            for item in document["by_counts"]
        }
        return cls(by_counts, Tabulated.from_document(document["other"]))


@dataclass(frozen=True)
class BudgetValidation:
    """What was found for a budget.

    Parameters
    ----------
    seed : int
    places : tuple of Place
        That of the planned readings in the middle first.
    tables : ErrorTables or None
        None where the law of propagation holds at all places.
    """

    seed: int
    places: tuple[Place, ...]
    tables: ErrorTables | None

    @property
    def agrees(self) -> bool:
        """Whether the law of propagation holds at all places."""
        return all(place.validation.agrees for place in self.places)

    @property
    def sentence(self) -> str:
        """The finding in words."""
        if self.agrees:
            return self.places[0].validation.sentence
        place = next(place for place in self.places if not place.validation.agrees)
        readings = " and ".join(map(str, place.counts.readings_per_sample))
        at = ", ".join(f"{name} = {value:g}" for name, value in place.estimates.items())
        return (
            f"At {at}, its samples read {readings} times: {place.validation.sentence} Decisions use the "
            "Monte Carlo distribution instead."
        )


def validate_budget(budget: Budget, *, seed: int) -> BudgetValidation:
    """Hold the law of propagation of a budget against Monte Carlo runs.

    Parameters
    ----------
    budget : Budget
        With a measurement model also with a ``validated_box``.
    seed : int

    Returns
    -------
    BudgetValidation

    Raises
    ------
    ModelError
        If the model fails in the validated box or curves too much there, or the distribution of its error
        changes so much over the box that one table cannot speak for it.
    ComponentError
        If a combined variance is not above zero.

    Notes
    -----
    Source: JCGM 101:2008, clause 8 (from memory). The table of a place holds quantiles of the error in units
    of the standard uncertainty of the law.
    """
    places = tuple(
        Place(counts, at, validate(budget, counts, estimates=at, seed=seed))
        for counts, points in _where(budget).items()
        for at in points
    )
    if all(place.validation.agrees for place in places):
        return BudgetValidation(seed, places, None)
    planned = places[0].counts
    tables = {
        counts: [_table(budget, counts, place.estimates, seed) for place in places if place.counts == counts]
        for counts in dict.fromkeys(place.counts for place in places)
    }
    if budget.model is not None:
        _refuse_where_it_changes(budget, places, tables[planned])
    by_counts = {counts: _farthest(own) for counts, own in tables.items()}
    return BudgetValidation(seed, places, ErrorTables(by_counts, _farthest(tuple(by_counts.values()))))


def _where(budget: Budget) -> dict[Counts, list[dict[str, float]]]:
    """Return the estimates at which each number of readings is checked, the planned one first."""
    samples, readings = budget.procedure.samples, budget.procedure.readings_per_sample
    counted = [
        Counts((readings.plan,) * samples.plan),
        Counts((readings.least,) * samples.least),
        Counts((readings.most,) * samples.most),
    ]
    if budget.model is not None:
        return _in_the_box(budget, counted)
    low, high = budget.validated_range
    middle = [{budget.characteristic: (low + high) / 2}]
    ends = [{budget.characteristic: low}, {budget.characteristic: high}]
    # Beside a part proportional to the value the shape of the error depends on it, too.
    varies = any(component.relative_terms for component in budget.components)
    return dict.fromkeys(counted, [*middle, *ends] if varies else middle)


def _in_the_box(budget: Budget, counted: Sequence[Counts]) -> dict[Counts, list[dict[str, float]]]:
    ranges = budget.validated_box
    found: dict[Counts, list[dict[str, float]]] = {}
    for counts in dict.fromkeys(counted):
        law = compiled(budget, counts)
        try:
            validate_over_box(law, ranges)
        except (ModelError, ComponentError):
            if counts == counted[0]:
                raise
            # Lots that are read so are held: no rule can be made for them.
            continue
        found[counts] = _telling_points(law, ranges)
    return found


def _telling_points(
    law: CompiledPropagation, ranges: Mapping[str, tuple[float, float]]
) -> list[dict[str, float]]:
    """Return the middle of a box, and where the model curves most and is least and most uncertain."""
    by_curvature = grid_by_difference(law, ranges)
    by_uncertainty = sorted(by_curvature, key=lambda point: law.at(point).standard_uncertainty)
    middle = {name: sum(ranges[name]) / 2 for name in law.model.read}
    chosen: list[dict[str, float]] = []
    for point in (middle, by_curvature[0], by_uncertainty[0], by_uncertainty[-1]):
        if point not in chosen:
            chosen.append(point)
    return chosen


def _table(budget: Budget, counts: Counts, estimates: Mapping[str, float], seed: int) -> Tabulated:
    law = combined(budget, counts, estimates=estimates)
    run = monte_carlo(
        budget_trials(budget, counts, estimates=estimates),
        coverage_probability=min(budget.coverage_probability, 0.95),
        seed=seed,
        trials=TABLE_TRIALS,
        probabilities=PROBABILITIES,
    )
    y, u = law.estimate or 0.0, law.standard_uncertainty
    return Tabulated(PROBABILITIES, tuple((q - y) / u for q in run.quantiles), run.trials)


def _farthest(tables: Sequence[Tabulated]) -> Tabulated:
    """Return the table of which no quantile lies nearer than that of any of these."""
    quantiles = np.array([table.quantiles for table in tables])
    probabilities = np.asarray(PROBABILITIES)
    outer = np.where(probabilities < 0.5, quantiles.min(axis=0), quantiles.max(axis=0))
    outer = np.where(probabilities == 0.5, quantiles.mean(axis=0), outer)
    return Tabulated(PROBABILITIES, tuple(outer.tolist()), min(table.trials for table in tables))


def _refuse_where_it_changes(budget: Budget, places: Sequence[Place], tables: Sequence[Tabulated]) -> None:
    tail = (1 - budget.coverage_probability) / 2
    for ends in ([t.lower_quantile(tail) for t in tables], [t.upper_quantile(tail) for t in tables]):
        if max(ends) - min(ends) <= SHAPE_TOLERANCE:
            continue
        worst = next(place for place in places if not place.validation.agrees)
        at = ", ".join(f"{name} = {value:g}" for name, value in worst.estimates.items())
        raise ModelError(
            f"at {at}: {worst.validation.sentence} Nor can one Monte Carlo distribution take its place, "
            f"because it changes over the validated box (an end of its coverage interval from "
            f"{min(ends):.3g} to {max(ends):.3g} standard uncertainties). Narrow the validated ranges, or "
            "reduce the uncertainty of what is read",
            where=("validated_box",),
        )
