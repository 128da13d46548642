"""EURACHEM guide to uncertainty from sampling, example A1 (from memory)."""

import pytest

from budgets.evidence.study_data import StudyData, evaluate_study


def test_every_figure_of_the_duplicate_method(checked):
    assert checked("eurachem_sampling")


def test_the_robust_figures_of_the_guide_are_near(checked):
    """The guide's robust figures (from memory, not among the published cases) are of another algorithm.

    It winsorises single analyses (Analytical Methods Committee 1989), this program by ISO 5725-5; the two
    differ by a few per cent where the classical figure of sampling is off by 60.
    """
    data = checked("eurachem_sampling")["ufs-A1-classical"].inputs["data"]
    rows = tuple((target, k // 2, x) for target, values in enumerate(data) for k, x in enumerate(values))
    evaluation = evaluate_study("sampling", StudyData(("target", "sample", "result"), rows), study="lettuce")
    for name, printed in (
        ("robust_repeatability", 167.94),
        ("robust_sampling", 319.05),
        ("robust_measurement", 360.55),
        ("robust_between_targets", 565.40),
    ):
        assert evaluation.estimate(name).standard_uncertainty == pytest.approx(printed, rel=0.07)
    assert evaluation.diagnostics["robust"]["mean"] == pytest.approx(4408, rel=0.005)
