"""At which level what each design finds is drawn anew, where nobody says otherwise."""

import itertools

import numpy as np
import pytest

from budgets.components import Component
from budgets.declarations import Declaration, evaluate
from budgets.evidence.study_data import DESIGNS, NamedSource, StudyData, evaluate_study

DRAW = np.random.default_rng(3)


def nested(*counts):
    """Give labels and a figure with an effect of its own at every depth of them."""
    effects = {}
    rows = []
    for labels in itertools.product(*map(range, counts)):
        parts = [labels[:depth] for depth in range(1, len(labels))]
        shift = sum(effects.setdefault(part, DRAW.normal(0, 0.1)) for part in parts)
        rows.append(
            (
                *("-".join(map(str, labels[:depth])) for depth in range(1, len(labels))),
                float(3 + shift + DRAW.normal(0, 0.03)),
            )
        )
    return rows  # fmt: skip


def paired(number=60):
    levels = DRAW.uniform(2, 5, number)
    return [
        (f"V{i}", float(y + e + DRAW.normal(0, 0.02)), float(y + DRAW.normal(0, 0.02)))
        for i, (y, e) in enumerate(zip(levels, DRAW.normal(0, 0.1, number), strict=True))
        for _ in range(2)
    ]


def crossed():
    instruments, samples = DRAW.normal(0, 0.1, 6), DRAW.normal(0, 0.1, (10, 6))
    return [
        (f"S{i}", f"nir-{j}", float(i + instruments[j] + samples[i, j] + DRAW.normal(0, 0.02)))
        for i in range(10)
        for j in range(6)
        for _ in range(2)
    ]


SERIES = [(float(x),) for x in DRAW.normal(3, 0.1, 400)]
ASSIGNED = [(*row, 3.0) for row in nested(20, 2)]
STREAM = {"held_sample": False, "lot_length": 100, "increments": 4, "scheme": "systematic"}
# Design, columns, rows, options, and the level of each estimate that a component can be made of.
CASES = [
    ("repeatability", ("sample", "reading"), nested(10, 4), {}, {"repeatability": "reading"}),
    ("duplicates", ("sample", "result"), nested(10, 2), {}, {"repeatability": "reading"}),
    (
        "nested_precision",
        ("day", "presentation", "reading"),
        nested(12, 3, 3),
        {},
        {
            "repeatability": "reading",
            "between_presentations": "presentation",  # packed anew
            "between_days": "session",
            "intermediate_precision": "session",
        },
    ),
    (
        "sampling",
        ("target", "sample", "result"),
        nested(12, 3, 2),
        {},
        {"repeatability": "reading", "sampling": "sample"},
    ),
    (
        "fleet",
        ("sample", "instrument", "reading"),
        crossed(),
        {},
        {"repeatability": "reading", "between_instruments": "instrument"},
    ),
    (
        "agreement",
        ("pair", "reading", "reference"),
        paired(),
        {"independent": True},
        {"standard_error_of_prediction": "lot", "remainder": "lot", "bias": "calibration"},
    ),
    (
        "check_samples",
        ("session", "result", "assigned_value"),
        ASSIGNED,
        {},
        {"intermediate_precision": "session", "bias": "calibration"},
    ),
    ("production", ("lot", "reading"), nested(20, 3), {}, {"within_lot": "sample"}),
    ("process_stream", ("reading",), SERIES, {"held_sample": True}, {"repeatability": "reading"}),
    (
        "process_stream",
        ("reading",),
        SERIES,
        {"held_sample": True, "readings_averaged": 4},
        {"averaged_repeatability": "presentation"},
    ),
    ("process_stream", ("reading",), SERIES, STREAM, {"sampling": "sample"}),
]


def test_every_design_is_here():
    assert {case[0] for case in CASES} == set(DESIGNS)


@pytest.mark.parametrize(("design", "columns", "rows", "options", "levels"), CASES)
def test_the_default_level_of_an_estimate(design, columns, rows, options, levels):
    evaluation = evaluate_study(design, StudyData(columns, tuple(rows)), study="s", options=options)
    for name, level in levels.items():
        estimate = evaluation.estimate(name)
        quantity = "bias" if name == "bias" else "moisture"
        assert Component.from_estimate(name, quantity, None, estimate, "A").level == level, name


def test_several_quantities_of_one_scan_and_of_its_differences():
    """Replicate vectors at the level of the reading, what is left of differences at that of the lot."""
    rows = [(f"P{i}", *map(float, DRAW.normal(3, 0.1, 2))) for i in range(12) for _ in range(3)]
    scans = evaluate_study("covariance", StudyData(("sample", "x", "y"), tuple(rows)), study="s")
    joint = scans.estimate("repeatability_covariance")
    assert joint.may_feed[0] == "reading"
    columns = ("pair", "x", "y", "x_reference", "y_reference")
    rows = [(f"V{i}", *map(float, DRAW.normal(3, 0.3, 4))) for i in range(60)]
    sources = [NamedSource("analyzer_repeatability", joint)]
    evaluation = evaluate_study(
        "covariance",
        StudyData(columns, tuple(rows)),
        study="v",
        options={"independent": True},
        named_sources=sources,
    )
    assert evaluation.estimate("prediction_covariance").may_feed[0] == "lot"
    assert evaluation.estimate("bias_covariance").may_feed[0] == "calibration"


def test_the_trueness_of_a_laboratory_is_one_for_all_of_its_values():
    stated = evaluate(Declaration("standard_deviation", 0.08), code="ring").estimate()
    assert Component.from_estimate("trueness", "bias", None, stated, "B").level == "reference"
    both = evaluate(Declaration("reproducibility_limit", 0.3, repeatability_limit=0.1), code="limits")
    between, within = both.estimate("between_laboratories"), both.estimate("repeatability")
    assert (between.may_feed[0], within.may_feed[0]) == ("reference", "reading")
