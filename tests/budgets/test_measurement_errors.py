"""What scatters from lot to lot, and what all lots share."""

import math
from dataclasses import replace

import pytest

from budgets.conformity import Tolerance
from budgets.correlations import Correlation
from budgets.errors import LimitsError, NotSupportedError
from budgets.evidence.evaluation import MeanSquare, Term, variance
from budgets.level_dependence import LevelDependence
from budgets.measurement_errors import (
    COMMON_LEVELS,
    RANDOM_LEVELS,
    MeasurementErrors,
    error_terms,
    exceeds_counted,
    measurement_errors,
)
from budgets.measurement_models import MeasurementModel, Quantity
from budgets.propagation import Counts, combined

LIMIT = Tolerance(None, 4.0)


def test_parts_make_up_the_whole(a_budget):
    for counts in (Counts((1,)), Counts((2, 3))):
        errors = measurement_errors(a_budget(), counts, LIMIT)
        whole = combined(a_budget(), counts)
        assert errors.whole.at(4.0) == pytest.approx(whole.standard_uncertainty, rel=1e-14)
        assert errors.degrees_of_freedom == pytest.approx(whole.effective_degrees_of_freedom)
        assert errors.common == LevelDependence(pytest.approx(0.02), 0.0)
        assert errors.bias == 0.0


def test_only_calibration_reference_and_the_one_instrument_are_common(a_budget, a_component):
    assert set(COMMON_LEVELS) == {"instrument", "calibration", "reference"}
    lines = [a_component(level, 0.01, level=level) for level in (*RANDOM_LEVELS, *COMMON_LEVELS)]
    budget = a_budget(components=tuple(lines), bias=None)
    errors = measurement_errors(budget, Counts((1,)), LIMIT)
    assert errors.random.constant == pytest.approx(0.01 * math.sqrt(6))
    assert errors.common.constant == pytest.approx(0.01 * math.sqrt(3))


def test_an_uncorrected_bias_is_carried_along(a_budget):
    assert measurement_errors(a_budget(bias_treatment="in_guard_band"), Counts((1,)), LIMIT).bias == 0.03


def test_parts_proportional_to_the_value_stay_so(a_budget, a_component):
    relative = (Term(1.0, MeanSquare("relative", 0.01**2, 20)),)
    line = a_component("relative", 0.0, level="lot", terms=(), relative_terms=relative)
    budget = a_budget(components=(*a_budget().components, line))
    errors = measurement_errors(budget, Counts((1,)), LIMIT)
    assert errors.random.proportional == pytest.approx(0.01)
    assert errors.random.constant == pytest.approx(math.hypot(0.04, 0.05))
    assert variance(error_terms(budget, Counts((1,)), RANDOM_LEVELS, 3.0)) == pytest.approx(
        0.04**2 + 0.05**2 + 0.03**2
    )


def test_correlated_components_of_one_level_stay_together(a_budget, a_component):
    lines = (
        a_component("repeatability", 0.04, level="reading"),
        a_component("first", 0.03, level="calibration"),
        a_component("second", 0.03, level="calibration"),
    )
    budget = a_budget(
        components=lines, bias=None, correlations=(Correlation(("first", "second"), "calibration", 0.5),)
    )
    errors = measurement_errors(budget, Counts((1,)), LIMIT)
    assert errors.common.constant**2 == pytest.approx(0.03**2 * (1 + 1 + 2 * 0.5))
    assert errors.random.constant == pytest.approx(0.04)


def test_a_budget_without_common_parts_has_none(a_budget, a_component):
    budget = a_budget(components=(a_component("repeatability", 0.04),), bias=None)
    assert measurement_errors(budget, Counts((1,)), LIMIT).common == LevelDependence(0.0, 0.0)
    assert error_terms(budget, Counts((1,)), COMMON_LEVELS, 3.0) == []


def test_readings_without_scatter_do_not_exist(a_budget, a_component):
    budget = a_budget(components=(a_component("trueness", 0.04, level="reference"),), bias=None)
    with pytest.raises(LimitsError, match="a component is missing"):
        measurement_errors(budget, Counts((1,)), LIMIT)
    with pytest.raises(LimitsError, match="a component is missing"):
        MeasurementErrors.of(0.0, 0.1)


def test_a_characteristic_computed_from_several_is_refused(a_budget, a_component):
    model = MeasurementModel("moisture * 2", (Quantity("moisture"),))
    budget = a_budget(
        components=(a_component(),), bias=None, model=model, validated_box={"moisture": (1.5, 5.5)}
    )
    for call in (
        lambda: measurement_errors(budget, Counts((1,)), LIMIT),
        lambda: error_terms(budget, Counts((1,)), RANDOM_LEVELS, 3.0),
    ):
        with pytest.raises(NotSupportedError, match="global risks"):
            call()
    assert replace(budget, model=None) is not budget


@pytest.mark.parametrize(
    ("ratio", "exceeds"),
    [(3.32, False), (3.33, True)],  # F tables: 3.33 for 5 and 10 degrees of freedom, 5 % (from memory)
)
def test_a_variance_is_held_against_what_is_counted_by_f(ratio, exceeds):
    counted = [Term(1.0, MeanSquare("counted", 0.04, 10))]
    assert exceeds_counted(0.04 * ratio, 5, counted) is exceeds
    # In another unit the same.
    assert exceeds_counted(4.0 * ratio, 5, [Term(100.0, MeanSquare("counted", 0.04, 10))]) is exceeds


def test_where_nothing_is_counted_all_that_is_seen_exceeds_it():
    assert exceeds_counted(1e-9, 5, [])
    assert not exceeds_counted(0.0, 5, [])
