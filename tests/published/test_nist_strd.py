"""NIST Statistical Reference Datasets, one-way analysis of variance (package data)."""

from pathlib import Path

import pytest
import scipy

from budgets.evidence.study_data import StudyData, evaluate_study

FOLDER = Path(scipy.__file__).parent / "stats/tests/data/nist_anova"
LOWER = ("SiRstv", "SmLs01", "SmLs02", "SmLs03")
AVERAGE = ("AtmWtAg", "SmLs04", "SmLs05", "SmLs06")
HIGHER = ("SmLs07", "SmLs08", "SmLs09")


def test_certified_analyses_of_variance(checked):
    assert checked("nist_strd")


@pytest.mark.parametrize("name", [*LOWER, *AVERAGE, *HIGHER])
def test_every_data_set_to_nine_digits(name):
    """All eleven, also those with 18,009 values and with 13 constant leading digits.

    The certified values stand in lines 39 to 50, the data start at line 61.
    """
    path = FOLDER / f"{name}.dat"
    if not path.exists():
        pytest.skip(f"this build of scipy comes without its test data ({path.name})")
    lines = path.read_text("utf-8").splitlines()
    certified = [float(word) for line in lines[38:50] for word in line.split() if "E" in word and "." in word]
    rows = tuple((level, float(value)) for level, value in (line.split() for line in lines[60:]))
    evaluation = evaluate_study("nested_precision", StudyData(("instrument", "reading"), rows), study="strd")
    between, within = evaluation.diagnostics["analysis_of_variance"]
    sums = between["sum_of_squares"], within["sum_of_squares"]
    found = [
        sums[0],
        between["mean_square"],
        between["f_statistic"],
        sums[1],
        within["mean_square"],
        sums[0] / sum(sums),
        evaluation.estimate("repeatability").standard_uncertainty,
    ]
    assert found == pytest.approx(certified, rel=1e-9)
