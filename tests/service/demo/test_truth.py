"""The evaluation finds the demo plant's truth again, within the intervals that it states itself.

The truth is outside of the evaluation: it is what the seeded script drew the raw data from.
"""

from __future__ import annotations

import math
from pathlib import Path

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


@pytest.fixture(scope="module")
def evaluations() -> dict[str, Evaluation]:
    repeatability, duplicates, agreement = plant.studies()
    found = {"repeatability": evaluated(repeatability), "duplicates": evaluated(duplicates)}
    sources = (
        NamedSource("analyzer_repeatability", found["repeatability"].estimate("repeatability")),
        NamedSource("reference_repeatability", found["duplicates"].estimate("repeatability")),
    )
    return found | {"agreement": evaluated(agreement, *sources)}


def covers(estimate: Estimate, truth: float) -> bool:
    assert estimate.interval is not None
    return estimate.interval.lower <= truth <= estimate.interval.upper


def test_the_repeatability_of_the_analyzer_is_found(evaluations: dict[str, Evaluation]) -> None:
    assert covers(evaluations["repeatability"].estimate("repeatability"), TRUTH.repeatability)


def test_the_repeatability_of_the_reference_is_found(evaluations: dict[str, Evaluation]) -> None:
    assert covers(evaluations["duplicates"].estimate("repeatability"), TRUTH.reference_repeatability)


def test_the_bias_is_found_as_analyzer_minus_laboratory(evaluations: dict[str, Evaluation]) -> None:
    """The laboratory's own bias is one number for all pairs: it sits in the bias, not in any scatter."""
    bias = evaluations["agreement"].estimate("bias")
    assert covers(bias, TRUTH.bias)
    assert not covers(bias, TRUTH.analyzer_bias)


def test_the_remainder_is_found_without_the_bias_of_the_laboratory(
    evaluations: dict[str, Evaluation],
) -> None:
    remainder = evaluations["agreement"].estimate("remainder")
    assert remainder.usable
    assert covers(remainder, TRUTH.remainder)
    with_the_laboratory = math.hypot(TRUTH.remainder, TRUTH.laboratory_bias, TRUTH.reference_repeatability)
    assert remainder.standard_uncertainty is not None
    assert remainder.standard_uncertainty < with_the_laboratory


def test_a_reproducibility_limit_is_no_source_to_take_out() -> None:
    """Its between-laboratory part does not scatter between pairs of one laboratory."""
    *_, agreement = plant.studies()
    stated = Declaration(meaning="reproducibility_limit", value=0.25, unit="%")
    reproducibility = evaluate_declaration(stated, code="oven").estimates[0]
    repeatability = next(iter(plant.studies()))
    sources = (
        NamedSource("analyzer_repeatability", evaluated(repeatability).estimate("repeatability")),
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
    assert len(made) == 4
