import numpy as np
import pytest

from budgets.evidence.screening import cochran_findings, grubbs_findings

QUIET = [("a", [1.0, 1.1]), ("b", [2.0, 2.1]), ("c", [3.0, 2.9]), ("d", [4.0, 4.1]), ("e", [1.0, 0.9])]


def test_one_group_that_scatters_more_is_found():
    assert cochran_findings(QUIET) == []
    found = cochran_findings([*QUIET, ("loud", [1.0, 2.0])])
    assert [(f.group, f.grade, f.test) for f in found] == [("loud", "outlier", "Cochran")]
    # C = .5 / (.5 + 5 x .005)
    assert found[0].statistic == pytest.approx(0.5 / 0.525)
    straggler = cochran_findings([*QUIET, ("loud", [1.0, 1.5])])
    assert straggler[0].grade == "straggler"


def test_unequal_groups_have_a_limit_each():
    found = cochran_findings([*QUIET, ("loud", [1.0, 2.0, 1.5])])
    assert found[0].test == "Cochran, generalised"
    assert found[0].to_document()["values"] == []


@pytest.mark.parametrize(
    "groups", [[], QUIET[:1], [("a", [1.0]), ("b", [2.0, 2.1])], [("a", [1, 1]), ("b", [2, 2])]]
)
def test_nothing_to_compare_finds_nothing(groups):
    assert cochran_findings(groups) == []


def test_one_value_that_stands_out_is_found():
    values = [3.1, 3.12, 3.08, 3.11, 3.09, 3.1]
    assert grubbs_findings("P01", values) == []
    found = grubbs_findings("P01", [*values, 3.4])
    assert [(f.values, f.grade) for f in found] == [((3.4,), "outlier")]
    assert grubbs_findings("P01", [3.10, 3.12, 3.08, 3.11, 3.09, 3.2])[0].grade == "straggler"


@pytest.mark.parametrize(
    ("pair", "grade"), [((3.6, 3.62), "outlier"), ((2.5, 2.52), "outlier"), ((3.19, 3.2), "straggler")]
)
def test_two_values_that_hide_each_other_are_found(pair, grade):
    found = grubbs_findings("P01", [3.10, 3.12, 3.08, 3.11, 3.09, 3.07, *pair])
    assert [(f.test, f.values, f.grade) for f in found] == [("Grubbs, two values", pair, grade)]


@pytest.mark.parametrize(
    "values", [[3.1, 3.2], [3.1, 3.1, 3.1], [3.1, 3.1, 3.2], [3.1, 3.1, 3.1, 3.2, 3.3], [1.0, 1.2, 1.1]]
)
def test_too_few_values_or_a_scatter_hidden_by_the_display_find_nothing(values):
    assert grubbs_findings("P01", values) == []


def test_the_levels_hold_under_the_normal_distribution():
    """Simulation: about 5 % of samples of ten normal values speak in the test for one value."""
    generator = np.random.default_rng(11)
    draws = generator.standard_normal((2000, 10)).tolist()
    share = sum(
        any(found.test == "Grubbs, one value" for found in grubbs_findings("x", values)) for values in draws
    )
    assert share / 2000 == pytest.approx(0.05, abs=0.015)
