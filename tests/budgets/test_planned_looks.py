import math
from types import SimpleNamespace

import numpy as np
import pytest
from scipy.stats import norm

from budgets.budget import Count, Procedure
from budgets.chosen_looks import risk_per_chosen_look
from budgets.conformity import Tolerance
from budgets.decision_rules import DecisionRule
from budgets.error_distributions import StudentT
from budgets.errors import NotSupportedError
from budgets.joined_looks import covariance_of_looks, draws_of
from budgets.measurement_models import MeasurementModel, Quantity
from budgets.planned_looks import planned_looks, risk_per_look_of
from budgets.propagation import Counts, combined
from budgets.reading_patterns import ReadingPattern
from budgets.release import ReleaseRule

LIMIT = Tolerance(None, 4.0)
FOREVER = math.inf


def a_rule(rounds=2, **changes):
    members = {"kind": "guarded_by_specific_risk", "largest_risk": 0.05, "rounds": rounds}
    return DecisionRule(**{**members, **changes})


@pytest.fixture(params=[25.0, FOREVER], ids=["t", "normal"])
def budget(request, a_component, a_budget):
    nu = request.param
    return a_budget(
        components=(
            a_component("repeatability", 0.04, nu),
            a_component("presentation", 0.02, nu, level="presentation"),
            a_component("sampling", 0.06, nu, level="sample"),
            a_component("days", 0.02, nu, level="session"),
            a_component("remainder", 0.04, nu, level="lot"),
        ),
        bias=None,
    )


def a_plan(generator, procedure, rounds):
    """Return all that is read, round by round: new samples or the same, in the same session or a new one."""
    samples, sessions, presentations, patterns = [], [], [], []
    for number in range(rounds):
        old = sorted(set(samples))
        again = old[: procedure.samples.most] if old and generator.random() < 0.4 else []
        wanted = generator.integers(procedure.samples.least, procedure.samples.most + 1)
        names = again or [f"{number}-{i}" for i in range(wanted)]
        session = generator.choice(["one", f"session {number}"])
        anew = generator.random() < 0.5
        for name in names:
            count = generator.integers(
                procedure.readings_per_sample.least, procedure.readings_per_sample.most + 1
            )
            for i in range(count):
                samples.append(name)
                sessions.append(str(session))
                presentations.append(f"{name}/{number}/{i}" if anew else name)
        groups = {"sample": samples, "session": sessions, "presentation": presentations}
        patterns.append(ReadingPattern({level: tuple(labels) for level, labels in groups.items()}))
    return patterns


@pytest.mark.parametrize("rejection", ["at_tolerance_limit", "guarded"])
@pytest.mark.parametrize("rounds", [2, 3])
def test_whatever_is_read_within_the_procedure_the_overall_risk_is_held(budget, rounds, rejection):
    """A lot exactly at the limit, 25 ways to read it, each simulated with the limits of the compiled rule."""
    rule = a_rule(rounds, rejection=rejection)
    per_look = risk_per_look_of(budget, LIMIT, rule)
    generator = np.random.default_rng(rounds)
    trials = 40_000
    worst = 0.0
    for _ in range(25):
        patterns = a_plan(generator, budget.procedure, rounds)
        covariance = covariance_of_looks(budget, patterns)
        nu = max(_freedom(budget, pattern) for pattern in patterns)
        scale = 1.0 if math.isinf(nu) else np.sqrt(generator.chisquare(nu, trials) / nu)[:, None]
        errors = generator.multivariate_normal(np.zeros(rounds), covariance, trials, method="eigh") / scale
        open_, released = np.ones(trials, bool), 0
        for pattern, x in zip(patterns, 4.0 + errors.T, strict=True):
            z = StudentT(_freedom(budget, pattern)).upper_quantile(per_look)
            u = math.sqrt(covariance_of_looks(budget, [pattern])[0, 0])
            released += int((open_ & (x <= 4.0 - z * u)).sum())
            rejected = x > (4.0 if rejection == "at_tolerance_limit" else 4.0 + z * u)
            open_ &= (x > 4.0 - z * u) & ~rejected
        worst = max(worst, released / trials)
    assert worst <= 0.05 + 4 * math.sqrt(0.05 * 0.95 / trials)
    # It is not bought by a risk so small that the rounds are worth nothing: what is left is for who chooses.
    assert worst > 0.03


def _freedom(budget, pattern):
    return combined(budget, pattern).effective_degrees_of_freedom


def test_a_procedure_that_leaves_nothing_open_has_the_factor_of_rule_40(a_component, a_budget):
    """One reading per round, all its error its own: z = 1.871 for two looks (mathematics.md, rule 40)."""
    budget = a_budget(
        components=(a_component("repeatability", 0.04),),
        bias=None,
        procedure=Procedure(Count(1, 1, 1), Count(1, 1, 1)),
    )
    ((least, most),) = planned_looks(budget, 2)
    assert (least, most) == pytest.approx((0.5**0.5, 0.5**0.5))
    assert norm.isf(risk_per_look_of(budget, LIMIT, a_rule())) == pytest.approx(1.871, abs=0.0005)


def test_the_smallest_correlation_is_that_of_the_fewest_readings_and_then_the_most(a_component, a_budget):
    budget = a_budget(
        components=(a_component("sampling", 0.04, level="sample"),),
        bias=None,
        procedure=Procedure(Count(1, 2, 3), Count(1, 1, 1)),
    )
    # One sample, then three new ones: u falls by half. The same samples again: nothing changes.
    assert planned_looks(budget, 3) == (pytest.approx((0.5, 1.0)), pytest.approx((0.5, 1.0)))


def test_one_round_has_no_risk_per_look(a_budget):
    assert risk_per_look_of(a_budget(), LIMIT, a_rule(1)) is None


def test_looks_at_what_no_reading_changes_are_one_look(a_component, a_budget):
    budget = a_budget(components=(a_component("remainder", 0.04, level="lot"),), bias=None)
    assert risk_per_look_of(budget, LIMIT, a_rule(3)) == pytest.approx(0.05, rel=1e-12)


def test_a_rule_by_a_factor_holds_the_risk_that_its_factor_implies(budget):
    """A guard band of U with k of 95 %, two-sided, is a risk of 2.5 % at one limit."""
    members = {
        "kind": "guarded_by_factor",
        "largest_risk": None,
        "multiple": 1.0,
        "coverage_probability": 0.95,
        "sides": 2,
    }
    found = risk_per_look_of(budget, LIMIT, a_rule(**members))
    assert found == pytest.approx(risk_per_look_of(budget, LIMIT, a_rule(largest_risk=0.025)), rel=1e-9)
    half = risk_per_look_of(budget, LIMIT, a_rule(**{**members, "multiple": 0.5}))
    nu = _freedom(budget, ReadingPattern({"sample": ("1", "1")}))
    errors = StudentT(nu)
    implied = errors.upper_tail(0.5 * errors.upper_quantile(0.025))
    assert half == pytest.approx(risk_per_look_of(budget, LIMIT, a_rule(largest_risk=implied)), rel=1e-9)


def test_a_part_proportional_to_the_value_is_looked_at_at_the_limits(a_component, a_budget):
    member = a_component("repeatability", 0.02)
    budget = a_budget(
        components=(
            a_component("repeatability", 0.0, terms=(), relative_terms=member.terms),
            a_component("remainder", 0.06, level="lot"),
        ),
        bias=None,
    )
    assert draws_of(budget, {"moisture": 3.0})[0].variance == pytest.approx(0.06**2)
    # The more of the error is the reading's own, the less alike are the looks: the upper limit decides.
    both = risk_per_look_of(budget, Tolerance(2.0, 5.0), a_rule())
    assert both == pytest.approx(risk_per_look_of(budget, Tolerance(None, 5.0), a_rule()), rel=2e-3)
    assert both < risk_per_look_of(budget, Tolerance(2.0, None), a_rule())


def test_a_compiled_rule_of_two_rounds_takes_the_risk_per_look(budget):
    rule = a_rule()
    per_look = risk_per_look_of(budget, LIMIT, rule)
    compiled = ReleaseRule.compile(budget, Counts((2,)), LIMIT, rule, risk_per_look=per_look)
    assert compiled.largest_specific_risk == pytest.approx(per_look, rel=1e-9)
    once = ReleaseRule.compile(budget, Counts((2,)), LIMIT, a_rule(1))
    assert compiled.upper_acceptance_limit < once.upper_acceptance_limit


def test_a_model_is_looked_at_in_the_middle_and_at_the_ends_of_its_box(a_component, a_budget):
    """Reading noise of fat moves the ratio more where fat is small: there the looks are least alike."""
    model = MeasurementModel("100 * moisture / fat", (Quantity("moisture"), Quantity("fat")))
    budget = a_budget(
        components=(
            a_component("m", 0.05, level="lot"),
            a_component("f", 0.2, quantity="fat"),
        ),
        bias=None,
        model=model,
        validated_box={"moisture": (2.0, 4.0), "fat": (20.0, 30.0)},
    )
    found = risk_per_look_of(budget, Tolerance(None, 20.0), a_rule())
    ends = [{"moisture": 2.0, "fat": 20.0}, {"moisture": 3.0, "fat": 25.0}, {"moisture": 4.0, "fat": 30.0}]
    least, most = zip(*(planned_looks(budget, 2, [end])[0] for end in ends), strict=True)
    assert max(least) > min(least)
    assert found == pytest.approx(risk_per_chosen_look([(min(least), max(most))], 0.05), rel=1e-9)


def test_a_rule_by_global_risk_has_one_round():
    rule = SimpleNamespace(rounds=2, kind="guarded_by_global_risk")
    with pytest.raises(NotSupportedError, match="several rounds"):
        risk_per_look_of(None, LIMIT, rule)


def test_whatever_the_distribution_the_risks_of_the_looks_add_up(a_budget):
    assert risk_per_look_of(a_budget(), LIMIT, a_rule(), any_distribution=True) == 0.05 / a_rule().rounds
