"""The looks that a rule of several rounds plans, before anything is read: the risk that each may take.

What will be read in each round is free within the procedure. So the looks are taken at their worst: the
smallest correlations between one look and the next that the procedure leaves open, and whatever lies between
these and looks that are all the same. What is found holds the overall risk for every way to do the rounds.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from itertools import product

from budgets.budget import Budget, Procedure
from budgets.conformity import Tolerance
from budgets.decision_rules import DecisionRule
from budgets.error_distributions import StudentT
from budgets.errors import NotSupportedError
from budgets.joined_looks import Draw, draws_of
from budgets.levels import LEVELS
from budgets.looks import overall_risk, risk_per_look
from budgets.propagation import Counts, averaging_weights, compiled, compiled_with, estimates_for

# Steps towards looks that are all the same, where the risk may be larger than with the smallest correlations.
_CLOSER = tuple(i / 8 for i in range(8))
_HELD = 1e-6
_MANY_LOOKS = 4
Weights = Mapping[str, float]
Three = tuple[float, float, float]


@dataclass(frozen=True)
class PlannedLooks:
    """What is known of the looks before any of them.

    Parameters
    ----------
    least_steps : tuple of float, shape (rounds - 1,)
        The smallest correlation of each look with the one before it.
    degrees_of_freedom : float
        The largest of a look: with the same risk per look, fewer leave the looks more alike.
    """

    least_steps: tuple[float, ...]
    degrees_of_freedom: float

    def risk_per_look(self, largest_risk: float, *, rejection: str = "at_tolerance_limit") -> float:
        """Return the risk per look that holds the overall risk, whatever is read within the procedure.

        Parameters
        ----------
        largest_risk : float
            Over all looks, at the tolerance limit.
        rejection : {"at_tolerance_limit", "guarded"}

        Returns
        -------
        float
        """
        # Many looks as if u were known: cautious, and quick.
        nu = self.degrees_of_freedom if len(self.least_steps) < _MANY_LOOKS else math.inf

        def worst_at(risk: float) -> tuple[tuple[float, ...], float]:
            def overall(steps: Sequence[float]) -> float:
                return overall_risk(steps, risk, nu, rejection=rejection)

            steps = self._worst(overall)
            return steps, overall(steps)

        found = largest_risk
        worst, overall = worst_at(found)
        # What is worst moves a little as the risk per look falls.
        while overall > largest_risk * (1 + _HELD):
            found = min(found, risk_per_look(worst, largest_risk, nu, rejection=rejection))
            worst, overall = worst_at(found)
        return found

    def _worst(self, risk: Callable[[Sequence[float]], float]) -> tuple[float, ...]:
        """Return the steps of the largest risk: first along all steps at once, then along each of them."""
        found = max((self._closer((near,) * len(self.least_steps)) for near in _CLOSER), key=risk)
        for place, least in enumerate(self.least_steps):
            ways = [
                (*found[:place], least + near * (1 - least), *found[place + 1 :]) for near in (*_CLOSER, 1.0)
            ]
            found = max((found, *ways), key=risk)
        return found

    def _closer(self, near: Sequence[float]) -> tuple[float, ...]:
        """Return the steps, each moved by a share of its way towards looks that are the same."""
        return tuple(step + share * (1 - step) for step, share in zip(self.least_steps, near, strict=True))


def planned_looks(
    budget: Budget, rounds: int, estimates: Sequence[Mapping[str, float] | None] = (None,)
) -> PlannedLooks:
    """Return what a budget's procedure leaves open about the looks of some rounds.

    Parameters
    ----------
    budget : Budget
    rounds : int
    estimates : sequence of mapping of str to float or None
        Where the uncertainty is looked at; see `budgets.propagation.combined`.

    Returns
    -------
    PlannedLooks

    Raises
    ------
    ModelError
        As in `budgets.joined_looks.draws_of`.
    """
    steps = [1.0] * (rounds - 1)
    largest = 0.0
    corners = tuple(_corners(budget.procedure))
    for where in estimates:
        draws = draws_of(budget, where)
        for place in range(rounds - 1):
            ways = _ways_to_go_on(corners, place + 1)
            steps[place] = min(steps[place], *(_correlation(draws, *way) for way in ways))
        for (samples, readings), number in product(corners, range(1, rounds + 1)):
            weights = averaging_weights(Counts((readings,) * samples * number))
            law = compiled_with(budget, weights)
            largest = max(largest, law.at(estimates_for(budget, where)).effective_degrees_of_freedom)
    return PlannedLooks(tuple(steps), largest)


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
    if any_distribution:
        return largest_risk / rule.rounds
    looks = planned_looks(budget, rule.rounds, places)
    return looks.risk_per_look(largest_risk, rejection=rule.rejection)


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
