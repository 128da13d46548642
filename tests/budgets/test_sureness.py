import math

import numpy as np
import pytest
from scipy.stats import chi2, norm

from budgets.conformity import Tolerance
from budgets.decision_rules import DecisionRule
from budgets.error_distributions import Tabulated
from budgets.release import ReleaseRule
from budgets.sureness import standard_uncertainty_interval, sureness, sureness_text
from budgets.uncertainty_at_limits import UncertaintyAtLimits

RISK = DecisionRule("guarded_by_specific_risk", largest_risk=0.05)


def a_rule(nu=12.0, tabulated=None):
    uncertain = UncertaintyAtLimits(0.1, nu, None)
    return ReleaseRule.of_uncertainty(uncertain, Tolerance(2.0, 4.0), RISK, 0.95, tabulated)


@pytest.mark.parametrize("nu", [1.0, 2.7, 18.9987, 300.0])
def test_the_interval_of_u_is_that_of_chi_square(nu):
    found = standard_uncertainty_interval(0.1, nu)
    assert found == pytest.approx([0.1 * math.sqrt(nu / chi2.ppf(p, nu)) for p in (0.975, 0.025)], rel=1e-9)


def test_the_interval_holds_the_true_standard_deviation_as_often_as_it_says():
    squares = np.random.default_rng(11).chisquare(9, 20_000) / 9
    low, high = standard_uncertainty_interval(1.0, 9.0)
    held = np.mean((np.sqrt(squares) * low <= 1) & (np.sqrt(squares) * high >= 1))
    assert held == pytest.approx(0.95, abs=4 * math.sqrt(0.95 * 0.05 / 20_000))


def test_at_each_end_u_counts_as_known():
    rule = a_rule()
    found = sureness(rule, 3.9)
    low, high = standard_uncertainty_interval(0.1, 12.0)
    expected = [norm.cdf(0.1 / u) - norm.cdf(-1.9 / u) for u in (high, low)]
    assert [found.lower_conformance_probability, found.upper_conformance_probability] == pytest.approx(
        expected
    )
    # Outside of tolerance a larger uncertainty makes conformance likelier.
    beyond = sureness(rule, 4.1)
    assert beyond.lower_conformance_probability == pytest.approx(norm.sf(0.1 / low))
    assert sureness(a_rule(math.inf), 3.9) is None


def test_quantiles_of_a_monte_carlo_run_keep_their_shape():
    p = (1e-4, *np.linspace(0.01, 0.99, 99), 1 - 1e-4)
    table = Tabulated(p, tuple(1.5 * norm.ppf(p)), 100_000)
    found = sureness(a_rule(12.0, table), 3.9)
    low, _ = standard_uncertainty_interval(0.1, 12.0)
    assert found.upper_conformance_probability == pytest.approx(norm.cdf(0.1 / low / 1.5), abs=1e-3)


def test_it_is_said_in_a_plain_sentence():
    text = sureness_text(sureness(a_rule(), 3.9), "%")
    assert text == (
        "u rests on 12 degrees of freedom: it lies from 0.072 to 0.165 % (95 %), the conformance probability "
        "then from 72.8 % to 91.8 %. The verdict stays."
    )
    sure = sureness_text(sureness(a_rule(), 3.0), "%")
    assert sure.endswith("the conformance probability is > 99.99 % either way. The verdict stays.")
    assert "u is taken as known" in sureness_text(None, "%")
    assert "spread of the items" in sureness_text(None, "%", items=True)
