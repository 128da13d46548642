"""The looks that a rule of several rounds plans, before anything is read: the risk that each may take.

What will be read in each round is free within the procedure, and may be chosen by what was seen before. So
the risk per look is the one that holds the overall risk for every choice between the smallest and the largest
correlation, of one look with the next, that the procedure leaves open.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping, Sequence
from itertools import product

from budgets.budget import Budget, Procedure
from budgets.chosen_looks import Step, risk_per_chosen_look
from budgets.conformity import Tolerance
from budgets.decision_rules import DecisionRule
from budgets.error_distributions import StudentT
from budgets.errors import NotSupportedError
from budgets.joined_looks import Draw, draws_of
from budgets.levels import LEVELS
from budgets.propagation import Counts, compiled, estimates_for

Weights = Mapping[str, float]
Three = tuple[float, float, float]


def planned_looks(
    budget: Budget, rounds: int, estimates: Sequence[Mapping[str, float] | None] = (None,)
) -> tuple[Step, ...]:
    """Return what a budget's procedure leaves open about the looks of some rounds.

    Parameters
    ----------
    budget : Budget
    rounds : int
    estimates : sequence of mapping of str to float or None
        Where the uncertainty is looked at; see `budgets.propagation.combined`.

    Returns
    -------
    tuple of tuple of float, shape (rounds - 1, 2)
        The smallest and the largest correlation of each look with the one before it.

    Raises
    ------
    ModelError
        As in `budgets.joined_looks.draws_of`.
    """
    steps = [(1.0, 0.0)] * (rounds - 1)
    corners = tuple(_corners(budget.procedure))
    for where in estimates:
        draws = draws_of(budget, where)
        for place, (least, most) in enumerate(steps):
            found = [_correlation(draws, *way) for way in _ways_to_go_on(corners, place + 1)]
            steps[place] = min(least, *found), max(most, *found)
    return tuple(steps)


def risk_per_look_of(
    budget: Budget, tolerance: Tolerance, rule: DecisionRule, *, any_distribution: bool = False
) -> float | None:
    """Return the risk per look of a decision rule with a budget.

    Parameters
    ----------
    budget : Budget
    tolerance : Tolerance
    rule : DecisionRule
    any_distribution : bool
        Whatever the joint distribution of the looks: the overall risk is at most the sum of theirs.

    Returns
    -------
    float or None
        None for a rule of one round.

    Raises
    ------
    NotSupportedError
        For a rule that does not hold a risk at the limit.

    Notes
    -----
    What a rule by a factor holds is the risk that its factor implies for one look, done as planned. The
    uncertainty of a measurement model is looked at in the middle and at two ends of its validated box.
    """
    if rule.rounds == 1:
        return None
    if rule.kind == "guarded_by_global_risk":
        raise NotSupportedError("several rounds of a rule by global risk", where=("rounds",))
    places = _where(budget, tolerance)
    largest_risk = rule.largest_risk
    if largest_risk is None:
        largest_risk = _implied_risk(rule, budget, places[0])
    steps = planned_looks(budget, rule.rounds, places)
    found = risk_per_chosen_look(steps, largest_risk, rejection=rule.rejection)
    return min(found, largest_risk / rule.rounds) if any_distribution else found


def _where(budget: Budget, tolerance: Tolerance) -> tuple[Mapping[str, float] | None, ...]:
    if budget.model is not None:
        return tuple(
            {name: low + share * (high - low) for name, (low, high) in budget.validated_box.items()}
            for share in (0.5, 0.0, 1.0)
        )
    if not any(component.relative_terms for component in budget.components):
        return (None,)
    return tuple(
        {budget.characteristic: limit} for limit in (tolerance.upper, tolerance.lower) if limit is not None
    )


def _implied_risk(rule: DecisionRule, budget: Budget, where: Mapping[str, float] | None) -> float:
    assert rule.multiple is not None and rule.coverage_probability is not None and rule.sides is not None
    procedure = budget.procedure
    planned = Counts((procedure.readings_per_sample.plan,) * procedure.samples.plan)
    found = compiled(budget, planned).at(estimates_for(budget, where))
    errors = StudentT(found.effective_degrees_of_freedom)
    factor = rule.multiple * errors.upper_quantile((1 - rule.coverage_probability) / rule.sides)
    return float(errors.upper_tail(factor))


# --- what the procedure leaves open -------------------------------------------------------------------------


def _corners(procedure: Procedure) -> Iterator[tuple[int, int]]:
    """Give the fewest and the most samples, each with the fewest and the most readings."""
    samples, readings = procedure.samples, procedure.readings_per_sample
    yield from dict.fromkeys(product((samples.least, samples.most), (readings.least, readings.most)))


def _ways_to_go_on(corners: Sequence[tuple[int, int]], rounds: int) -> Iterator[tuple[Weights, ...]]:
    """Give the weights before, shared, and after, of every extreme way to do one more round."""
    for (samples, readings), (more, each) in product(corners, repeat=2):
        # Done before: with new samples every time, or with the same ones read again.
        for n, m in {(rounds * samples, readings), (samples, rounds * readings)}:
            for apart, anew in product((False, True), repeat=2):
                yield _with_new_samples(n, m, more, each, rounds if anew else 0, apart)
                yield _with_the_same(n, m, each, rounds if anew else 0, apart)


def _with_new_samples(
    n: int, m: int, more: int, each: int, sessions: int, apart: bool
) -> tuple[Weights, ...]:
    whole = n + more
    of_reading = (1 / (n * m), 1 / (whole * m), (n / m + more / each) / whole**2)
    of_sample = (1 / n, 1 / whole, 1 / whole)
    return _weights(of_reading, of_sample, n / whole, sessions, apart)


def _with_the_same(n: int, m: int, each: int, sessions: int, apart: bool) -> tuple[Weights, ...]:
    of_reading = (1 / (n * m), 1 / (n * (m + each)), 1 / (n * (m + each)))
    return _weights(of_reading, (1 / n,) * 3, m / (m + each), sessions, apart)


def _weights(
    of_reading: Three, of_sample: Three, share: float, sessions: int, apart: bool
) -> tuple[Weights, ...]:
    """Give the weights of every level; ``share`` is what was read before, ``sessions`` that it came from."""
    of_session = (1.0, 1.0, 1.0)
    if sessions:
        of_session = (1 / sessions, share / sessions, share**2 / sessions + (1 - share) ** 2)
    levels: dict[str, Three] = dict.fromkeys(LEVELS, (1.0, 1.0, 1.0))
    levels.update(reading=of_reading, sample=of_sample)
    levels.update(dict.fromkeys(("session", "instrument"), of_session))
    # Readings that are each presented anew average these errors as they do their own.
    levels.update(dict.fromkeys(("presentation", "increment"), of_reading if apart else of_sample))
    return tuple({level: three[place] for level, three in levels.items()} for place in range(3))


def _correlation(draws: Sequence[Draw], before: Weights, shared: Weights, after: Weights) -> float:
    first, common, second = (
        math.fsum(draw.shared(weights) for draw in draws) for weights in (before, shared, after)
    )
    return min(1.0, common / math.sqrt(first * second))
