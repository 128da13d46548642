import math

import pytest

from budgets.components import LEVELS, Component
from budgets.errors import ComponentError
from budgets.evidence.evaluation import MeanSquare, Term


def test_figures_of_one_draw(a_component):
    component = a_component(standard_uncertainty=0.04, degrees_of_freedom=12)
    assert component.standard_uncertainty == pytest.approx(0.04)
    assert component.degrees_of_freedom == 12


@pytest.mark.parametrize(
    ("changes", "where"),
    [
        ({"level": "batch"}, "level"),
        ({"evaluation_type": "C"}, "evaluation_type"),
        ({"distribution": "oval"}, "distribution"),
        ({"covered_weight": 1.5}, "covered_weight"),
        ({"terms": ()}, "terms"),
        ({"terms": (Term(-1.0, MeanSquare("a", 1.0, 3)),)}, "terms"),
        ({"terms": (Term(math.inf, MeanSquare("a", 1.0, 3)),)}, "terms"),
        ({"terms": (Term(1.0, MeanSquare("a", 1.0, 3)), Term(1.0, MeanSquare("a", 2.0, 3)))}, "terms"),
    ],
)
def test_what_a_component_cannot_be(a_component, changes, where):
    with pytest.raises(ComponentError) as caught:
        a_component(**changes)
    assert caught.value.where == (where,)


def test_an_estimate_feeds_its_default_level_and_hands_over_what_it_contains(an_estimate):
    estimate = an_estimate(
        "remainder", may_feed=("lot", "sample"), contains=("remainder",), taken_out=("repeatability",)
    )
    component = Component.from_estimate("rest", "moisture", None, estimate, "A")
    assert (component.level, component.source) == ("lot", "remainder")
    assert component.contains == ("remainder",)
    assert component.taken_out == ("repeatability",)
    assert Component.from_estimate("rest", "moisture", "sample", estimate, "A").level == "sample"


def test_an_estimate_feeds_no_other_level(an_estimate):
    with pytest.raises(ComponentError, match="may feed the level reading, not 'lot'") as caught:
        Component.from_estimate("r", "moisture", "lot", an_estimate(), "A")
    assert caught.value.where == ("level",)


def test_an_honest_zero_is_no_component(an_estimate):
    with pytest.raises(ComponentError, match="honest zero"):
        Component.from_estimate("r", "moisture", None, an_estimate(usable=False), "A")


def test_the_levels_run_from_the_inside_out():
    assert LEVELS[0] == "reading"
    assert LEVELS[-1] == "reference"
    assert len(LEVELS) == 9


def test_what_is_relative_to_another_quantity_is_a_relative_figure(an_estimate):
    with pytest.raises(ComponentError, match="not relative") as caught:
        Component.from_estimate("r", "moisture", None, an_estimate(), "A", relative_to="fat")
    assert caught.value.where == ("relative_to",)
