"""What studies of variance components may stand for in a budget, and what would count twice."""

import numpy as np
import pytest

from budgets.budget import Budget, Count, Procedure
from budgets.components import Component
from budgets.errors import ComponentError
from budgets.evidence.study_data import StudyData, evaluate_study
from budgets.propagation import Counts, combined

PROCEDURE = Procedure(Count(1, 1, 3), Count(1, 2, 4))


@pytest.fixture(scope="module")
def evaluation():
    generator = np.random.default_rng(5)
    rows = [
        (day, 3 + a + 0.03 * generator.standard_normal())
        for day, a in enumerate(0.1 * generator.standard_normal(8))
        for _ in range(4)
    ]
    return evaluate_study("nested_precision", StudyData(("day", "reading"), tuple(rows)), study="prec")


def budget(evaluation, *names):
    return Budget(
        tuple(Component.from_estimate(n, "moisture", None, evaluation.estimate(n), "A") for n in names),
        PROCEDURE,
        coverage_probability=0.95,
        bias=None,
        bias_treatment="corrected",
        validated_range=(1.5, 5.5),
    )


def test_components_of_one_study_share_their_mean_squares(evaluation):
    """Several readings (n) of one session: (MS_B - MS_W)/4 + MS_W/n, MS_W gone at n = 4."""
    split = budget(evaluation, "between_days", "repeatability")
    between, within = evaluation.diagnostics["analysis_of_variance"]
    for readings in (1, 2, 4):
        found = combined(split, Counts((readings,)))
        expected = between["mean_square"] / 4 + (1 / readings - 0.25) * within["mean_square"]
        assert found.variance == pytest.approx(expected)
    assert found.effective_degrees_of_freedom == pytest.approx(between["degrees_of_freedom"])


def test_the_intermediate_precision_stands_alone(evaluation):
    """It is the variance of one reading, so its parts beside it would count twice."""
    whole = budget(evaluation, "intermediate_precision")
    split = budget(evaluation, "between_days", "repeatability")
    assert combined(whole, Counts((1,))).variance == pytest.approx(combined(split, Counts((1,))).variance)
    for part in ("repeatability", "between_days"):
        with pytest.raises(ComponentError, match="counted twice"):
            budget(evaluation, "intermediate_precision", part)


def test_a_negative_component_is_no_component_of_a_budget():
    rows = tuple((day, 3 + 0.01 * day + d) for day in range(4) for d in (-0.03, 0.03, 0.0))
    negative = evaluate_study("nested_precision", StudyData(("day", "reading"), rows), study="prec")
    with pytest.raises(ComponentError):
        budget(negative, "between_days")


def test_sampling_and_its_robust_twin_are_one_source():
    generator = np.random.default_rng(6)
    t, s = 0.3 * generator.standard_normal(8), 0.2 * generator.standard_normal((8, 2))
    rows = tuple(
        (i, j, 3 + t[i] + s[i, j] + 0.05 * generator.standard_normal())
        for i in range(8)
        for j in range(2)
        for _ in range(2)
    )
    study = evaluate_study("sampling", StudyData(("target", "sample", "result"), rows), study="sam")
    levels = {c.code: c.level for c in budget(study, "sampling", "repeatability").components}
    assert levels == {"sampling": "sample", "repeatability": "reading"}
    with pytest.raises(ComponentError, match="both contain sampling"):
        budget(study, "sampling", "robust_measurement")
