"""Correlations of the errors of several characteristics, against the package `uncertainties`."""

import math

import numpy as np
import pytest
import uncertainties

from budgets.budget import Budget, Count, Procedure
from budgets.errors import CorrelationError
from budgets.evidence.evaluation import MeanSquare, Term
from budgets.measurement_models import MeasurementModel, Quantity
from budgets.propagation import Counts
from budgets.reading_patterns import ReadingPattern
from budgets.shared_errors import NamedBudget, SharedErrors
from tests.budgets.scans import DRY, LOT, MEANS, NAMES, NOISE, a_scan_budget, joint_line, line

COUNTS = Counts((2, 2))
PROCEDURE = Procedure(Count(1, 1, 3), Count(1, 2, 4))


def derived(expression=DRY, **changes):
    budget = a_scan_budget(expression, **changes)
    return NamedBudget(budget, {name: name for name in budget.model.names})


def direct(name="moisture", *, u=0.15, level="reading", bias=None, lot=0.1):
    components = [line("r", name, u, level=level), line("l", name, lot)]
    if bias is not None:
        components.append(line("b", "bias", bias, level="calibration"))
    budget = Budget(
        components=tuple(components),
        procedure=PROCEDURE,
        coverage_probability=0.95,
        bias=None if bias is None else 0.02,
        bias_treatment="corrected",
        validated_range=(1.0, 60.0),
    )
    return NamedBudget(budget, {name: name, "bias": f"{name}-pairs/bias"})


def test_two_models_of_one_scan_agree_with_uncertainties():
    """Both models over the same correlated quantities, as another program propagates them."""
    other = "100 * fat / (100 - moisture) + 0 * protein"
    found = SharedErrors((derived(), derived(other)), COUNTS).correlations([MEANS, MEANS])
    covariance = np.array(NOISE) / 4 + np.array(LOT)
    p, m, f = uncertainties.correlated_values([MEANS[name] for name in NAMES], covariance)
    expected = uncertainties.correlation_matrix([100 * p / (100 - m - f), 100 * f / (100 - m)])
    assert found == pytest.approx(expected, abs=1e-9)


def test_a_channel_shares_its_own_error_with_what_is_computed_from_it():
    """The budget of moisture itself has no covariances; that of the derived characteristic has them."""
    moisture = direct(u=0.15, lot=0.1)
    found = SharedErrors((moisture, derived()), COUNTS).correlations([{"moisture": 3.0}, MEANS])
    covariance = np.array(NOISE) / 4 + np.array(LOT)
    p, m, f = uncertainties.correlated_values([MEANS[name] for name in NAMES], covariance)
    expected = uncertainties.correlation_matrix([m, 100 * p / (100 - m - f)])
    # NOISE and LOT give moisture the same deviations as its own budget: 0.15 and 0.1.
    assert found == pytest.approx(expected, abs=1e-9)


def test_two_channels_go_together_as_the_budget_says_that_holds_both():
    found = SharedErrors((direct("moisture"), direct("protein", u=0.3, lot=0.2), derived()), COUNTS)
    matrix = found.correlations([{"moisture": 3.0}, {"protein": 25.0}, MEANS])
    # by hand: correlations of NOISE and LOT, with the deviations of the budgets of their own
    noise = 0.012 / math.sqrt(0.04 * 0.0225) * 0.15 * 0.3 / 4
    lot = 0.004 / math.sqrt(0.02 * 0.01) * 0.1 * 0.2
    size = math.sqrt((0.15**2 / 4 + 0.01) * (0.3**2 / 4 + 0.04))
    assert matrix[0, 1] == pytest.approx((noise + lot) / size)
    assert np.linalg.eigvalsh(matrix)[0] > 0


def test_a_budget_that_judges_nothing_here_may_say_how_errors_go_together():
    pair, means = (direct("moisture"), direct("protein")), [{"moisture": 3.0}, {"protein": 25.0}]
    among = SharedErrors((*pair, derived()), COUNTS).correlations([*means, MEANS])
    beside = SharedErrors(pair, COUNTS, (derived(),)).correlations(means)
    assert beside == pytest.approx(among[:2, :2])
    relative = (Term(1.0, MeanSquare("s1", 1e-4, 20)),)
    scale = line("scale", "moisture", 0.0, level="instrument", terms=(), relative_terms=relative)
    with pytest.raises(CorrelationError):
        SharedErrors(pair, COUNTS, (derived(more=(scale,)),)).correlations(means)


def test_where_no_budget_holds_both_nothing_is_assumed():
    pair = SharedErrors((direct("moisture"), direct("protein")), COUNTS)
    with pytest.raises(CorrelationError, match=r"moisture and protein go together at the level 'reading'"):
        pair.correlations([{"moisture": 3.0}, {"protein": 25.0}])
    with pytest.raises(CorrelationError, match="go together"):
        pair.correlations([{"moisture": 3.1}, {"protein": 25.0}])


def test_a_bias_is_shared_by_its_name():
    """Two characteristics with nothing in common but the bias of one study: the share of its variance."""
    given = (Quantity("offset", None, "given", 0.02),)
    more = (line("b", "offset", 0.3, level="calibration"),)
    computed = derived("protein + 0 * moisture + 0 * fat - offset", more=more, given=given)
    computed = NamedBudget(computed.budget, {**computed.names, "offset": "protein-pairs/bias"})
    own = direct("protein", u=0.2, lot=math.sqrt(0.02), bias=0.3)
    found = SharedErrors((own, computed), COUNTS).correlations([{"protein": 25.0}, MEANS])
    assert found == pytest.approx(np.ones((2, 2)))


def test_errors_of_different_levels_are_independent():
    moisture = direct("moisture", level="sample", lot=0.1)
    protein = NamedBudget(
        Budget(
            components=(line("r", "protein", 0.2, level="reading"),),
            procedure=PROCEDURE,
            coverage_probability=0.95,
            bias=None,
            bias_treatment="corrected",
            validated_range=(1.0, 60.0),
        ),
        {"protein": "protein"},
    )
    found = SharedErrors((moisture, protein), COUNTS).correlations([{"moisture": 3.0}, {"protein": 25.0}])
    assert found == pytest.approx(np.eye(2))


def test_budgets_that_say_different_things_give_the_least_relief():
    weaker = tuple(tuple(v if i == j else v / 2 for j, v in enumerate(row)) for i, row in enumerate(NOISE))
    pair = (direct("moisture"), direct("protein"))
    means = [{"moisture": 3.0}, {"protein": 25.0}]
    strong = SharedErrors((*pair, derived()), COUNTS).correlations([*means, MEANS])
    both = SharedErrors((*pair, derived(), derived(reading=weaker)), COUNTS).correlations(
        [*means, MEANS, MEANS]
    )
    assert 0 < both[0, 1] < strong[0, 1]


def test_proportional_parts_are_taken_at_the_readings():
    relative = (Term(1.0, MeanSquare("s1", 1e-4, 20)),)
    more = (line("scale", "moisture", 0.0, level="instrument", terms=(), relative_terms=relative),)
    found = SharedErrors((derived(more=more), derived("moisture + 0*fat + 0*protein", more=more)), COUNTS)
    covariance = np.array(NOISE) / 4 + np.array(LOT)
    for moisture in (2.0, 40.0):
        means = {**MEANS, "moisture": moisture}
        covariance[1, 1] = NOISE[1][1] / 4 + LOT[1][1] + 1e-4 * moisture**2
        p, m, f = uncertainties.correlated_values([means[name] for name in NAMES], covariance)
        expected = uncertainties.correlation_matrix([100 * p / (100 - m - f), m])
        assert found.correlations([means, means]) == pytest.approx(expected, abs=1e-9)


def test_a_pattern_of_readings_counts_like_its_counts():
    pattern = ReadingPattern({"sample": ("a", "a", "b", "b")})
    pair = (derived(), derived("100 * fat / (100 - moisture) + 0 * protein"))
    assert SharedErrors(pair, pattern).correlations([MEANS, MEANS]) == pytest.approx(
        SharedErrors(pair, COUNTS).correlations([MEANS, MEANS])
    )


def test_what_cannot_hold_together_is_refused():
    """Two budgets of two channels each, and a third pair that contradicts them."""

    def pair(first, second, r):
        names = (first, second)
        noise = ((0.04, r * 0.04), (r * 0.04, 0.04))
        budget = Budget(
            components=(joint_line("noise", "reading", noise, names),),
            procedure=PROCEDURE,
            coverage_probability=0.95,
            bias=None,
            bias_treatment="corrected",
            validated_range=(1.0, 90.0),
            model=MeasurementModel(f"{first} + 0*{second}", tuple(Quantity(name) for name in names)),
        )
        return NamedBudget(budget, {name: name for name in names})

    three = (pair("a", "b", 0.9), pair("b", "c", 0.9), pair("c", "a", -0.9))
    means = [{"a": 1.0, "b": 1.0}, {"b": 1.0, "c": 1.0}, {"c": 1.0, "a": 1.0}]
    with pytest.raises(CorrelationError, match="cannot hold together"):
        SharedErrors(three, COUNTS).correlations(means)


def test_a_model_that_stands_still_has_nothing_to_share():
    still = derived("fat * 0 + moisture * 0 + protein * 0")
    with pytest.raises(CorrelationError, match="no variance"):
        SharedErrors((derived(), still), COUNTS).correlations([MEANS, MEANS])


@pytest.mark.parametrize("names", [{"moisture": "m"}, {"moisture": "m", "bias": "m"}])
def test_every_quantity_has_a_name_of_its_own(names):
    with pytest.raises(CorrelationError, match="a name of its own"):
        NamedBudget(direct(bias=0.1).budget, names)


def test_a_quantity_without_an_error_at_a_level_shares_none_there():
    """A channel whose noise the matrix gives as zero; the other budget has some and is not answered."""
    silent = ((0.04, 0.0, 0.0), (0.0, 0.0, 0.0), (0.0, 0.0, 0.03))
    channel = direct("moisture")
    with pytest.raises(CorrelationError, match="moisture and protein"):
        SharedErrors((channel, derived(reading=silent)), COUNTS).correlations([{"moisture": 3.0}, MEANS])
