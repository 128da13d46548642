import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from budgets.components import Component
from budgets.declarations import MEANINGS, Declaration, evaluate
from budgets.errors import ComponentError, UnitsError
from budgets.evidence.evaluation import variance
from budgets.propagation import expanded_uncertainty


def stated(*args, **options):
    return evaluate(Declaration(*args, **options), code="ring-test-12")


@pytest.mark.parametrize(
    ("meaning", "options", "divisor"),
    [
        ("standard_deviation", {}, 1),
        ("expanded", {"coverage_factor": 2.0}, 2),
        ("expanded_with_probability", {"coverage_probability": 0.95}, 1.959963984540054),
        ("repeatability_limit", {}, 2.8),
        ("repeatability_limit", {"factor": "exact"}, 1.96 * math.sqrt(2)),
        ("repeatability_limit", {"factor": 2.77}, 2.77),
        ("reproducibility_limit", {}, 2.8),
        ("half_width", {"distribution": "rectangular"}, math.sqrt(3)),
        ("half_width", {"distribution": "triangular"}, math.sqrt(6)),
        ("half_width", {"distribution": "arcsine"}, math.sqrt(2)),
        ("half_width", {"distribution": "trapezoidal", "top_to_base_ratio": 1.0}, math.sqrt(3)),
        ("half_width", {"distribution": "trapezoidal", "top_to_base_ratio": 0.0}, math.sqrt(6)),
        ("half_width", {"distribution": "normal", "coverage_probability": 0.95}, 1.959963984540054),
        ("resolution", {}, math.sqrt(12)),
    ],
)
def test_a_figure_is_divided_by_what_its_meaning_says(meaning, options, divisor):
    estimate = stated(meaning, 0.3, **options).estimate()
    assert estimate.standard_uncertainty == pytest.approx(0.3 / divisor, rel=1e-14)
    assert estimate.degrees_of_freedom == math.inf


def test_degrees_of_freedom_come_from_results_reliability_or_are_stated():
    assert stated("standard_deviation", 0.1, results=12).estimate().degrees_of_freedom == 11
    # JCGM 100:2008, G.4.2, example (from memory): 25 % gives 8.
    assert stated("standard_deviation", 0.1, reliability=0.25).estimate().degrees_of_freedom == 8
    estimate = stated("expanded_with_probability", 0.2, coverage_probability=0.95, degrees_of_freedom=9.0)
    assert estimate.estimate().degrees_of_freedom == 9
    assert estimate.estimate().standard_uncertainty == pytest.approx(0.2 / 2.2621571628, rel=1e-9)


@given(st.floats(1e-3, 1e3), st.floats(0.5, 0.999), st.floats(1, 200))
def test_an_expanded_uncertainty_comes_back(u, p, nu):
    value = expanded_uncertainty(u, p, nu)
    estimate = stated("expanded_with_probability", value, coverage_probability=p, degrees_of_freedom=nu)
    assert estimate.estimate().standard_uncertainty == pytest.approx(u, rel=1e-12)


def test_a_mean_of_determinations_gives_both_its_own_and_the_single_one():
    evaluation = stated("mean_of_determinations", 0.05, determinations=4)
    assert evaluation.estimate("standard_uncertainty").standard_uncertainty == pytest.approx(0.05)
    assert evaluation.estimate("single_determination").standard_uncertainty == pytest.approx(0.10)
    codes = {e.terms[0].mean_square.code for e in evaluation.estimates}
    assert len(codes) == 1


def test_both_limits_give_repeatability_and_what_lies_between_laboratories():
    evaluation = stated("reproducibility_limit", 0.28, repeatability_limit=0.14)
    assert evaluation.estimate("repeatability").standard_uncertainty == pytest.approx(0.05)
    between = evaluation.estimate("between_laboratories")
    assert between.variance == pytest.approx(0.1**2 - 0.05**2)
    assert between.may_feed[0] == "reference"
    equal = stated("reproducibility_limit", 0.14, repeatability_limit=0.14)
    assert not equal.estimate("between_laboratories").usable


def test_a_reproducibility_limit_alone_is_marked_as_such():
    estimate = stated("reproducibility_limit", 0.28).estimate()
    assert estimate.name == "reproducibility"
    assert "between_laboratories" in estimate.contains


def test_a_stated_unit_is_converted_as_a_difference():
    declaration = Declaration("standard_deviation", 1.5, unit="g/kg")
    assert evaluate(declaration, code="d", unit="%").estimate().standard_uncertainty == pytest.approx(0.15)
    kelvin = evaluate(Declaration("standard_deviation", 1.8, unit="degF"), code="d", unit="degC")
    assert kelvin.estimate().standard_uncertainty == pytest.approx(1.0)
    with pytest.raises(UnitsError):
        evaluate(Declaration("standard_deviation", 1.5, unit="g/L"), code="d", unit="%")


def test_what_was_stated_is_kept():
    evaluation = stated("resolution", 0.01, unit="%", document="data sheet", title="display")
    assert evaluation.diagnostics == {
        "meaning": "resolution",
        "value": 0.01,
        "unit": "%",
        "document": "data sheet",
        "title": "display",
    }
    assert evaluation.design == "declaration"


def test_a_bare_figure_is_refused_with_all_meanings():
    with pytest.raises(ComponentError, match=r"what does the figure 0.2 mean") as caught:
        stated(None, 0.2)
    assert all(meaning in caught.value.message for meaning in MEANINGS)
    with pytest.raises(ComponentError, match="'error' is no meaning"):
        stated("error", 0.2)


@pytest.mark.parametrize(
    ("unit", "value", "options", "fraction"),
    [
        (None, 0.02, {"figure": "standard_deviation"}, 0.02),
        ("%", 2.0, {"figure": "expanded", "coverage_factor": 2.0}, 0.01),
        ("ppm", 300.0, {"figure": "half_width", "distribution": "rectangular"}, 300e-6 / math.sqrt(3)),
        ("1", 0.056, {"figure": "repeatability_limit"}, 0.02),
        ("%", 1.0, {"figure": "expanded_with_probability", "coverage_probability": 0.95}, 0.01 / 1.959964),
    ],
)
def test_a_relative_figure_is_a_fraction_of_the_value(unit, value, options, fraction):
    evaluation = evaluate(Declaration("relative", value, unit=unit, **options), code="declared", unit="mg/kg")
    estimate = evaluation.estimate()
    assert estimate.terms == ()
    (term,) = estimate.relative_terms
    assert math.sqrt(term.mean_square.value) == pytest.approx(fraction, rel=1e-6)
    assert evaluation.to_document()["diagnostics"]["meaning"] == "relative"
    component = Component.from_estimate("declared", "moisture", None, estimate, "B")
    assert component.relative_terms == estimate.relative_terms


def test_a_relative_figure_with_an_absolute_part():
    stated = Declaration("relative", 2.0, unit="%", figure="expanded", coverage_factor=2.0, absolute=0.1)
    estimate = evaluate(stated, code="declared").estimate()
    assert estimate.standard_uncertainty == pytest.approx(0.05)
    assert math.sqrt(estimate.relative_terms[0].mean_square.value) == pytest.approx(0.01)
    codes = {estimate.terms[0].mean_square.code, estimate.relative_terms[0].mean_square.code}
    assert codes == {"declared/standard_uncertainty", "declared/relative/standard_uncertainty"}


def test_relative_limits_of_two_laboratories():
    stated = Declaration("relative", 8.4, unit="%", figure="reproducibility_limit", repeatability_limit=5.6)
    evaluation = evaluate(stated, code="declared")
    within = evaluation.estimate("repeatability").relative_terms
    assert math.sqrt(variance(within)) == pytest.approx(0.02)
    between = variance(evaluation.estimate("between_laboratories").relative_terms)
    assert math.sqrt(between) == pytest.approx(math.sqrt(0.03**2 - 0.02**2))


@pytest.mark.parametrize(
    ("options", "where"),
    [
        ({}, ("figure",)),
        ({"figure": "resolution"}, ("figure",)),
        ({"figure": "relative"}, ("figure",)),
        ({"figure": "standard_deviation", "unit": "g/kg"}, ("unit",)),
        ({"figure": "standard_deviation", "coverage_factor": 2.0}, ("coverage_factor",)),
        ({"figure": "expanded"}, ("coverage_factor",)),
        ({"figure": "standard_deviation", "absolute": -1.0}, ("absolute",)),
        ({"figure": "reproducibility_limit", "repeatability_limit": 0.01, "absolute": 1.0}, ("absolute",)),
    ],
)
def test_a_relative_figure_says_what_it_is_a_fraction_of(options, where):
    with pytest.raises(ComponentError) as caught:
        evaluate(Declaration("relative", 0.02, **options), code="declared")
    assert caught.value.where == where


@pytest.mark.parametrize("option", [{"figure": "expanded"}, {"absolute": 1.0}])
def test_what_belongs_to_a_relative_figure_belongs_to_no_other(option):
    with pytest.raises(ComponentError, match="does not belong to resolution"):
        evaluate(Declaration("resolution", 0.02, **option), code="declared")


def test_a_document_is_named_by_title_edition_and_hash():
    named = {"title": "ring test 12", "edition": "2025", "sha256": "0a" * 32}
    diagnostics = evaluate(Declaration("resolution", 0.02, **named), code="declared").diagnostics
    assert named.items() <= diagnostics.items()
    with pytest.raises(ComponentError) as caught:
        evaluate(Declaration("resolution", 0.02, sha256="0a"), code="declared")
    assert caught.value.where == ("sha256",)


@pytest.mark.parametrize(
    ("meaning", "options", "where"),
    [
        ("standard_deviation", {"coverage_factor": 2.0}, "coverage_factor"),
        ("standard_deviation", {"results": 5, "reliability": 0.2}, "reliability"),
        ("standard_deviation", {"results": 1}, "results"),
        ("standard_deviation", {"reliability": 1.5}, "reliability"),
        ("mean_of_determinations", {}, "determinations"),
        ("mean_of_determinations", {"determinations": 0}, "determinations"),
        ("expanded", {}, "coverage_factor"),
        ("expanded", {"coverage_factor": -2.0}, "coverage_factor"),
        ("expanded_with_probability", {}, "coverage_probability"),
        ("expanded_with_probability", {"coverage_probability": 95.0}, "coverage_probability"),
        (
            "expanded_with_probability",
            {"coverage_probability": 0.9, "degrees_of_freedom": 0.0},
            "degrees_of_freedom",
        ),
        ("repeatability_limit", {"factor": "about"}, "factor"),
        ("repeatability_limit", {"factor": 0.0}, "factor"),
        ("reproducibility_limit", {"repeatability_limit": -0.1}, "repeatability_limit"),
        ("reproducibility_limit", {"repeatability_limit": 0.5}, "repeatability_limit"),
        ("half_width", {}, "distribution"),
        ("half_width", {"distribution": "oval"}, "distribution"),
        ("half_width", {"distribution": "normal"}, "coverage_probability"),
        ("half_width", {"distribution": "trapezoidal"}, "top_to_base_ratio"),
        ("half_width", {"distribution": "trapezoidal", "top_to_base_ratio": 2.0}, "top_to_base_ratio"),
        ("half_width", {"distribution": "rectangular", "coverage_probability": 0.9}, "coverage_probability"),
    ],
)
def test_options_that_are_missing_misplaced_or_out_of_range_are_named(meaning, options, where):
    with pytest.raises(ComponentError) as caught:
        stated(meaning, 0.2, **options)
    assert caught.value.where == (where,)


@pytest.mark.parametrize("value", [0.0, -0.1, math.nan, math.inf])
def test_a_figure_must_be_above_zero(value):
    with pytest.raises(ComponentError) as caught:
        stated("standard_deviation", value)
    assert caught.value.where == ("value",)
