import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.stats import norm, t

from budgets.chosen_looks import risk_of_chosen_looks, risk_per_chosen_look
from budgets.errors import LimitsError
from budgets.looks import overall_risk

REJECTIONS = ("at_tolerance_limit", "guarded")


@pytest.mark.parametrize("rejection", REJECTIONS)
@pytest.mark.parametrize("steps", [[0.5**0.5], [0.3, 0.8], [0.7, 0.8, 0.85]])
def test_looks_that_leave_no_choice_are_those_of_the_sequence_of_integrals(steps, rejection):
    """And so the factors of mathematics.md, rule 40 ([S]): z = 1.871 for two looks of one reading each."""
    single = [(step, step) for step in steps]
    found = risk_of_chosen_looks(single, 0.03, rejection=rejection)
    assert found == pytest.approx(overall_risk(steps, 0.03, rejection=rejection), abs=1e-9)
    each = risk_per_chosen_look(single, 0.05, rejection=rejection)
    assert overall_risk(steps, each, rejection=rejection) == pytest.approx(0.05, rel=1e-6)
    if len(steps) == 1 and rejection == "at_tolerance_limit":
        assert norm.isf(each) == pytest.approx(1.871, abs=0.0005)


@pytest.mark.parametrize("rejection", REJECTIONS)
def test_the_worst_choice_for_one_more_look_by_numpy(rejection):
    """At each estimate the best of 1,500 correlations, summed by the trapezoidal rule."""
    least, risk = 0.5, 0.03
    z = norm.isf(risk)
    held = np.linspace(-z, 0.0 if rejection == "at_tolerance_limit" else z, 4001)
    best = np.zeros_like(held)
    for step in np.linspace(least, 0.99999, 1500):
        best = np.maximum(best, norm.cdf((-z - step * held) / math.sqrt(1 - step**2)))
    expected = risk + np.trapezoid(best * norm.pdf(held), held)
    assert risk_of_chosen_looks([(least, 1.0)], risk, rejection=rejection) == pytest.approx(
        expected, abs=3e-5
    )


@pytest.mark.parametrize("nu", [math.inf, 12.0])
def test_a_line_that_chooses_how_much_to_read_stays_within_the_risk(nu):
    """A simulated lot at its limit, three looks; after each the line takes 1 to 6 further readings.

    It knows the law, and takes as many as release most probably at the next look, or most at the one after.
    No plan that it makes exceeds 5 %, though each beats the risk that a fixed plan would have left.
    """
    least = [1 / 7, 7 / 13]
    steps = [(math.sqrt(low), 1.0) for low in least]
    per_look = risk_per_chosen_look(steps, 0.05)
    z = t.isf(per_look, nu) if math.isfinite(nu) else norm.isf(per_look)
    trials = 150_000
    generator = np.random.default_rng(21)
    scale = 1.0 if math.isinf(nu) else np.sqrt(generator.chisquare(nu, trials) / nu)
    # Sums of readings of unit variance about the limit 0; the estimate over n has the uncertainty 1/sqrt(n).
    total, number = generator.normal(size=trials) / scale, np.ones(trials)
    open_, released = np.ones(trials, bool), 0
    for look in range(3):
        estimate = total / number
        accepted = estimate <= -z / np.sqrt(number)
        released += int((open_ & accepted).sum())
        open_ &= ~accepted & (estimate <= 0)
        if look < 2:
            choices = np.arange(1, 7)[:, None]
            then = number + choices
            # Known to be at the limit: the worst line is one that knows it.
            mean = total / then
            power = norm.cdf((-z / np.sqrt(then) - mean) / (np.sqrt(choices) / then))
            more = choices[np.argmax(power, axis=0), 0]
            total = total + generator.normal(size=trials) * np.sqrt(more) / scale
            number = number + more
    share = released / trials
    assert share <= 0.05 + 4 * math.sqrt(0.05 * 0.95 / trials)
    assert share > 0.04


@settings(max_examples=25, deadline=None)
@given(
    ends=st.lists(st.tuples(st.floats(0.1, 0.99), st.floats(0, 1)), min_size=1, max_size=2),
    inside=st.lists(st.floats(0, 1), min_size=2, max_size=2),
    risk=st.floats(0.002, 0.2),
    rejection=st.sampled_from(REJECTIONS),
)
def test_no_plan_that_is_made_before_exceeds_the_worst_choice(ends, inside, risk, rejection):
    steps = [(low, low + share * (1 - low)) for low, share in ends]
    plan = [low + share * (high - low) for (low, high), share in zip(steps, inside, strict=False)]
    worst = risk_of_chosen_looks(steps, risk, rejection=rejection)
    assert overall_risk(plan, risk, rejection=rejection) <= worst * (1 + 2e-3)
    # With fewer degrees of freedom the looks are more alike.
    assert overall_risk(plan, risk, 6.0, rejection=rejection) <= worst * (1 + 2e-3)
    # More that is left open is more risk.
    assert worst <= risk_of_chosen_looks([(0.05, 1.0)] * len(steps), risk, rejection=rejection) * (1 + 2e-3)


def test_looks_without_news_are_one_look():
    assert risk_of_chosen_looks([(1.0, 1.0), (1.0, 1.0)], 0.05) == 0.05
    assert risk_per_chosen_look([(1.0, 1.0), (1.0, 1.0)], 0.05) == 0.05
    assert risk_of_chosen_looks([], 0.05) == 0.05
    one = risk_of_chosen_looks([(0.7, 0.9)], 0.03)
    assert risk_of_chosen_looks([(1.0, 1.0), (0.7, 0.9)], 0.03) == pytest.approx(one, rel=1e-12)
    assert risk_of_chosen_looks([(0.7, 0.9), (1.0, 1.0)], 0.03) == pytest.approx(one, rel=1e-4)


def test_what_cannot_be_is_refused():
    with pytest.raises(LimitsError, match="risk per look"):
        risk_of_chosen_looks([(0.5, 1.0)], 0.5)
    with pytest.raises(LimitsError, match="correlated by 0 to 1"):
        risk_of_chosen_looks([(0.5, 0.4)], 0.05)
    with pytest.raises(LimitsError, match="10 looks"):
        risk_of_chosen_looks([(0.5, 1.0)] * 10, 0.05)
    with pytest.raises(LimitsError, match="rejection is"):
        risk_of_chosen_looks([(0.5, 1.0)], 0.05, rejection="never")
