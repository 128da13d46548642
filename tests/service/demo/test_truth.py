"""The evaluation finds the demo plant's truth again, within the intervals that it states itself.

The truth is outside of the evaluation: it is what the seeded script drew the raw data from.
"""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest

from budgets.declarations import Declaration
from budgets.declarations import evaluate as evaluate_declaration
from budgets.errors import EvidenceError
from budgets.evidence.evaluation import Estimate, Evaluation
from budgets.evidence.study_data import NamedSource, StudyData, evaluate_study
from service.demo import make_data, plant
from service.demo.make_data import TRUTH


def evaluated(study: plant.Document, *sources: NamedSource) -> Evaluation:
    return evaluate_study(
        study["design"],
        StudyData(tuple(study["columns"]), tuple(map(tuple, study["rows"]))),
        study=study["code"],
        named_sources=sources,
        options={"independent": True} if study["design"] == "agreement" else {},
    )


def all_evaluated() -> dict[str, dict[str, Evaluation]]:
    """Evaluate the studies of every channel, those of agreement on the others."""
    found: dict[str, dict[str, Evaluation]] = {}
    for study in plant.studies():
        if study["design"] == "covariance":
            continue
        mine = found.setdefault(study["characteristic"], {})
        names = {"repeatability": "analyzer_repeatability", "duplicates": "reference_repeatability"}
        sources = (
            [NamedSource(names[design], mine[design].estimate("repeatability")) for design in names]
            if study["design"] == "agreement"
            else []
        )
        mine[study["design"]] = evaluated(study, *sources)
    return found


@pytest.fixture(scope="module")
def evaluations() -> dict[str, dict[str, Evaluation]]:
    return all_evaluated()


def covers(estimate: Estimate, truth: float) -> bool:
    assert estimate.interval is not None
    return estimate.interval.lower <= truth <= estimate.interval.upper


Found = dict[str, dict[str, Evaluation]]
CHANNELS = pytest.mark.parametrize("channel", list(TRUTH))


@CHANNELS
def test_the_repeatability_of_the_analyzer_is_found(evaluations: Found, channel: str) -> None:
    estimate = evaluations[channel]["repeatability"].estimate("repeatability")
    assert covers(estimate, TRUTH[channel].repeatability)


@CHANNELS
def test_the_repeatability_of_the_reference_is_found(evaluations: Found, channel: str) -> None:
    estimate = evaluations[channel]["duplicates"].estimate("repeatability")
    assert covers(estimate, TRUTH[channel].reference_repeatability)


@CHANNELS
def test_the_bias_is_found_as_analyzer_minus_laboratory(evaluations: Found, channel: str) -> None:
    """The laboratory's own bias is one number for all pairs: it sits in the bias, not in any scatter."""
    assert covers(evaluations[channel]["agreement"].estimate("bias"), TRUTH[channel].bias)


@CHANNELS
def test_the_remainder_is_found_without_the_bias_of_the_laboratory(evaluations: Found, channel: str) -> None:
    truth = TRUTH[channel]
    remainder = evaluations[channel]["agreement"].estimate("remainder")
    assert remainder.usable
    assert covers(remainder, truth.remainder)
    with_the_laboratory = math.hypot(truth.remainder, truth.laboratory_bias, truth.reference_repeatability)
    assert remainder.standard_uncertainty is not None
    assert remainder.standard_uncertainty < with_the_laboratory


def test_the_correlations_within_a_scan_are_found() -> None:
    """Intervals by Fisher's z (common practice, no source): 80 degrees of freedom, three channels."""
    (study,) = [study for study in plant.studies() if study["code"] == "scan-cov"]
    found = np.array(evaluated(study).diagnostics["repeatability_correlations"])
    assert evaluated(study).diagnostics["quantities"] == list(make_data.CHANNELS)
    for i, j in ((0, 1), (0, 2), (1, 2)):
        distance = np.arctanh(found[i, j]) - np.arctanh(make_data.SCAN_CORRELATION[i, j])
        assert abs(distance) < 2.4 / math.sqrt(80 - 2)  # three at once: each at 98.3 %


def test_the_correlations_of_the_remainder_have_the_right_signs(evaluations: Found) -> None:
    scans, pairs = (study for study in plant.studies() if study["design"] == "covariance")
    sources = [
        NamedSource("analyzer_repeatability", evaluated(scans).estimate("repeatability_covariance")),
        *(
            NamedSource(
                "reference_repeatability",
                evaluations[channel]["duplicates"].estimate("repeatability"),
                quantity=channel,
            )
            for channel in TRUTH
        ),
    ]
    study = evaluate_study(
        "covariance",
        StudyData(tuple(pairs["columns"]), tuple(map(tuple, pairs["rows"]))),
        study="pair-cov",
        named_sources=sources,
        options={"independent": True},
    )
    assert study.estimate("remainder_covariance").usable
    matrix = np.array(study.diagnostics["remainder_matrix"])
    truth = np.array([truth.remainder for truth in TRUTH.values()])
    # The standard deviations within a factor of two; the strongest correlation with its sign.
    assert (np.abs(np.log2(np.sqrt(np.diag(matrix)) / truth)) < 1).all()
    assert matrix[1, 2] < 0


@pytest.mark.slow
def test_the_intervals_hold_as_often_as_they_say(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Twelve 95 % intervals from each of 60 seeds: a simulation, within four standard errors (0.8 %)."""
    monkeypatch.setattr(make_data, "FOLDER", tmp_path)
    monkeypatch.setattr(plant, "data_folder", lambda: tmp_path)
    held = []
    for seed in range(60):
        monkeypatch.setattr(make_data, "SEED", 20260114 + seed)
        make_data.main()
        for channel, found in all_evaluated().items():
            truth = TRUTH[channel]
            held += [
                covers(found["repeatability"].estimate("repeatability"), truth.repeatability),
                covers(found["duplicates"].estimate("repeatability"), truth.reference_repeatability),
                covers(found["agreement"].estimate("bias"), truth.bias),
                covers(found["agreement"].estimate("remainder"), truth.remainder),
            ]
    assert len(held) == 720
    assert abs(sum(held) / len(held) - 0.95) < 4 * 0.0081


def test_a_reproducibility_limit_is_no_source_to_take_out() -> None:
    """Its between-laboratory part does not scatter between pairs of one laboratory."""
    scans, _, agreement, *_ = plant.studies()
    stated = Declaration(meaning="reproducibility_limit", value=0.25, unit="%")
    reproducibility = evaluate_declaration(stated, code="oven").estimates[0]
    sources = (
        NamedSource("analyzer_repeatability", evaluated(scans).estimate("repeatability")),
        NamedSource("reference_repeatability", reproducibility),
    )
    with pytest.raises(EvidenceError, match="reproducibility"):
        evaluated(agreement, *sources)


def test_the_seeded_script_makes_the_files_that_are_kept(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    kept = make_data.FOLDER
    monkeypatch.setattr(make_data, "FOLDER", tmp_path)
    make_data.main()
    made = {path.name: path.read_bytes() for path in tmp_path.iterdir()}
    assert made == {path.name: path.read_bytes() for path in kept.iterdir()}
    assert len(made) == 19
