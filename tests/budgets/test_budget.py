import math

import pytest

from budgets.budget import Count, Procedure
from budgets.errors import BudgetsError, ComponentError, ModelError
from budgets.evidence.evaluation import MeanSquare, Term
from tests.budgets.scans import MEANS, a_scan_budget

WHOLE = {"contains": ("repeatability", "remainder", "resolution"), "level": "lot"}
BIAS = {"quantity": "bias", "level": "calibration"}


@pytest.mark.parametrize("numbers", [(0, 1, 1), (2, 1, 3), (1, 3, 2), (1, 1, 51)])
def test_counts_out_of_order_are_refused(numbers):
    with pytest.raises(ComponentError, match="1 <= least <= plan <= most <= 50"):
        Count(*numbers)


@pytest.mark.parametrize(
    ("changes", "where", "kind"),
    [
        ({"coverage_probability": 1.0}, ("coverage_probability",), ComponentError),
        ({"bias_treatment": "ignored"}, ("bias_treatment",), ComponentError),
        ({"validated_range": (5.5, 1.5)}, ("validated_range",), ComponentError),
        ({"validated_range": (1.5, math.inf)}, ("validated_range",), ComponentError),
        ({"validated_range": (-math.inf, 1.5)}, ("validated_range",), ComponentError),
        ({"bias": math.nan}, ("bias",), ModelError),
        ({"bias": None}, ("bias",), ModelError),
        ({"components": (), "bias": None}, ("components",), ComponentError),
    ],
)
def test_a_member_out_of_range_is_named(a_budget, changes, where, kind):
    with pytest.raises(kind) as caught:
        a_budget(**changes)
    assert caught.value.where == where


def refused(a_budget, *components, bias=None, match):
    with pytest.raises(BudgetsError, match=match) as caught:
        a_budget(components=components, bias=bias)
    return caught.value


def test_all_faults_are_told_at_once(a_budget):
    with pytest.raises(ComponentError) as caught:
        a_budget(coverage_probability=0.0, bias_treatment="?")
    assert [fault.where for fault in caught.value.each()] == [("coverage_probability",), ("bias_treatment",)]


def test_codes_are_unique(a_budget, a_component):
    error = refused(a_budget, a_component("r"), a_component("r"), match="two components are called 'r'")
    assert error.where == ("components", 1, "code")


def test_a_bias_needs_its_uncertainty(a_budget, a_component):
    refused(a_budget, a_component(), bias=0.0, match="not known to be zero")


def test_a_model_without_a_bias_has_no_component_of_it(a_budget, a_component):
    assert a_budget(components=(a_component(),), bias=None).bias is None
    refused(a_budget, a_component(), a_component("b", **BIAS), match="the model has no bias")


def test_a_bias_alone_is_no_budget(a_budget, a_component):
    refused(a_budget, a_component("b", **BIAS), bias=0.1, match="only to its bias")


def test_several_input_quantities_need_a_model(a_budget, a_component):
    refused(a_budget, a_component("a"), a_component("b", quantity="protein"), match="moisture, protein")


def test_the_whole_and_its_part_are_counted_twice(a_budget, a_component):
    whole = a_component("sep", **WHOLE)
    part = a_component("r", contains=("repeatability", "resolution"))
    error = refused(a_budget, whole, part, match="sep and r both contain repeatability and resolution")
    assert error.where == ("components", 1)
    refused(a_budget, whole, a_component("rest", contains=("remainder",)), match="counted twice")


def test_resolution_beside_what_was_read_on_the_display_is_counted_twice(a_budget, a_component):
    part = a_component("r", contains=("repeatability", "resolution"))
    refused(a_budget, part, a_component("d", contains=("resolution",)), match="keep the larger of the two")


def test_equal_sources_of_different_quantities_do_not_clash(a_budget, a_component):
    components = (
        a_component("r", contains=("repeatability",)),
        a_component("b", contains=("repeatability",), **BIAS),
    )
    assert a_budget(components=components, bias=0.0).components == components


def test_repeatability_beyond_the_study_stands_beside_the_whole_and_only_there(a_budget, a_component):
    whole = a_component("sep", **WHOLE)
    beyond = a_component("beyond", contains=("repeatability",), covered_weight=0.5)
    plain = a_component("plain", contains=("repeatability",))
    assert a_budget(components=(whole, beyond), bias=None)
    assert a_budget(components=(beyond, whole), bias=None)
    refused(a_budget, beyond, match="or not at all")
    refused(a_budget, beyond, a_component("rest", contains=("remainder",)), match="or not at all")
    refused(a_budget, beyond, plain, match="counted twice")


def test_what_was_taken_out_of_a_remainder_comes_back(a_budget, a_component):
    rest = a_component("rest", level="lot", contains=("remainder",), taken_out=("repeatability",))
    refused(a_budget, rest, match="repeatability was taken out of rest")
    assert a_budget(components=(rest, a_component("r", contains=("repeatability",))), bias=None)
    # A declared standard deviation at the level of the reading does as well.
    assert a_budget(components=(rest, a_component("declared")), bias=None)
    both = a_component("rest", level="lot", taken_out=("repeatability", "presentation"))
    refused(a_budget, both, a_component("r"), match="presentation was taken out")


def test_fewer_readings_than_the_study_averaged_need_the_repeatability_beyond_it(a_budget, a_component):
    """With one reading the repeatability weighs more than in a study that averaged four."""
    whole = a_component("sep", reading_weight=0.25, **WHOLE)
    beyond = a_component("beyond", contains=("repeatability",), covered_weight=0.25)
    error = refused(a_budget, whole, match="as few as 1: add repeatability_beyond_study")
    assert error.where == ("components", 0)
    assert a_budget(components=(whole, beyond), bias=None)
    enough = Procedure(Count(2, 2, 2), Count(2, 2, 4))
    assert a_budget(components=(whole,), bias=None, procedure=enough)
    # The repeatability of another quantity brings nothing back.
    other = a_component("other", contains=("repeatability",), covered_weight=0.25, quantity="bias")
    refused(a_budget, whole, other, bias=0.0, match="2 faults")


def test_one_code_stands_for_one_mean_square(a_budget, a_component):
    twice = [(Term(1.0, MeanSquare("same", value, 9)),) for value in (0.01, 0.02)]
    error = refused(
        a_budget, *(a_component(str(i), terms=t) for i, t in enumerate(twice)), match="are called same"
    )
    assert error.where == ("components",)


def test_the_estimate_is_the_mean_reading_less_a_bias_that_is_corrected(a_budget):
    assert a_budget(bias=0.03).estimate({"moisture": 3.0}) == 3.0 - 0.03
    assert a_budget(bias=0.03, bias_treatment="in_guard_band").estimate({"moisture": 3.0}) == 3.0
    assert a_budget(bias=0.03).correction == 0.03


def test_the_estimate_of_a_budget_with_a_model_is_the_model_of_the_means():
    assert a_scan_budget().estimate(MEANS) == pytest.approx(100 * 25 / (100 - 3 - 27))


def test_an_estimate_of_something_else_is_refused(a_budget):
    with pytest.raises(ModelError, match="moisture"):
        a_budget().estimate({"fat": 27.0})
