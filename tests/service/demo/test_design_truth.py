"""The further study designs find the demo plant's truth again, and wrong evaluations of it are visible.

The truth is outside of the evaluation: it is what the seeded script drew the raw data from.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest

from budgets.evidence.evaluation import Estimate, Evaluation, MeanSquare, Term
from budgets.evidence.study_data import NamedSource, StudyData, evaluate_study
from service.demo import make_design_data as made
from service.demo import plant


def increments_of_a_lot(increments: int, scheme: str) -> float:
    """Give the sampling error of their mean, from the integrals over the exponential variogram of the truth.

    v(h) = 1 - exp(-h/T); the mean of v within a length j is 1 - 2 T/j + 2 (T/j)^2 (1 - exp(-j/T)); the sums
    over it as in mathematics: random, stratified, systematic.
    """
    lot, memory = float(plant.INCREMENTS["lot_length"]), made.MINUTES_REMEMBERED

    def within(length: float) -> float:
        part = memory / length
        return 1 - 2 * part - 2 * part**2 * math.expm1(-length / memory)

    step = lot / increments
    found = {
        "random": within(lot) / increments,
        "stratified": within(step) / increments,
        "systematic": within(lot)
        + 2
        / increments**2
        * sum((increments - k) * math.expm1(-k * step / memory) for k in range(1, increments)),
    }[scheme]
    return made.WANDERING * math.sqrt(found)


TRUTH = {
    ("days-and-runs", "repeatability"): made.READING,
    ("days-and-runs", "between_days"): made.BETWEEN_DAYS,
    ("days-and-runs", "between_runs"): made.BETWEEN_RUNS,
    ("days-and-runs", "intermediate_precision"): math.hypot(
        made.READING, made.BETWEEN_DAYS, made.BETWEEN_RUNS
    ),
    ("sampling", "repeatability"): made.READING,
    ("sampling", "sampling"): made.SAMPLING,
    ("sampling", "between_targets"): made.BETWEEN_LOTS,
    ("sampling", "measurement"): math.hypot(made.READING, made.SAMPLING),
    ("held-sample", "repeatability"): made.READING,
    ("check-samples", "repeatability"): made.READING,
    ("fleet", "repeatability"): made.READING,
    ("fleet", "sample_by_instrument"): made.SAMPLE_BY_INSTRUMENT,
    ("fleet", "between_instruments"): made.BETWEEN_INSTRUMENTS,
    ("production", "repeatability"): made.READING,
    ("production", "within_lot"): made.SAMPLING,
    ("stream", "sampling"): increments_of_a_lot(4, "systematic"),
}
NUMBERS = ("reading", "result", "assigned_value", "position")


def analyzer(seed: int) -> NamedSource:
    """Give the repeatability of the analyzer as a study of 80 degrees of freedom would find it."""
    found = made.READING**2 * np.random.default_rng(seed).chisquare(80) / 80
    square = MeanSquare("scans/within", float(found), 80.0)
    estimate = Estimate(
        "repeatability", (Term(1.0, square),), value=None, interval=None, may_feed=("reading",), usable=True
    )
    return NamedSource("analyzer_repeatability", estimate)


def evaluated(
    what: str, table: made.Table, options: dict[str, Any] | None = None, *, seed: int = made.SEED
) -> Evaluation:
    (about,) = [about for about, _ in plant.design_studies() if about["code"] == f"moisture-{what}"]
    columns, rows = table
    cells = [
        tuple(
            float(str(cell)) if name in NUMBERS else str(cell)
            for name, cell in zip(columns, row, strict=True)
        )
        for row in rows
    ]
    return evaluate_study(
        about["design"],
        StudyData(columns, tuple(cells)),
        study=about["code"],
        options=about["options"] if options is None else options,
        named_sources=[analyzer(seed)] if about["named_sources"] else [],
    )


def held_of(seed: int) -> list[bool]:
    tables = made.tables(seed)
    found = {
        what: evaluated(what, tables[f"moisture-{what}"], seed=seed)
        for what in dict.fromkeys(what for what, _ in TRUTH)
    }
    held = []
    for (what, name), truth in TRUTH.items():
        interval = found[what].estimate(name).interval
        assert interval is not None
        held.append(interval.lower <= truth <= interval.upper)
    return held


def test_the_truth_behind_the_kept_files_is_found() -> None:
    """Sixteen 95 % intervals, the seed not chosen: that more than three miss has probability 0.7 %."""
    assert sum(held_of(made.SEED)) >= 13


@pytest.mark.slow
def test_the_intervals_hold_as_often_as_they_say() -> None:
    """Sixteen 95 % intervals from each of 80 other seeds: a simulation, within four standard errors."""
    held = np.array([held_of(seed) for seed in range(80)])
    assert 0.95 - 4 * 0.0061 < held.mean() < 0.95 + 4 * 0.0061
    assert (held.mean(axis=0) > 0.95 - 4 * 0.0244).all()


def test_a_check_sample_shows_the_change_of_the_calibration() -> None:
    """Evaluated over the change, the scatter holds the step; on either side of it the bias is found."""
    columns, rows = made.tables(made.SEED)["moisture-check-samples"]
    whole = evaluated("check-samples", (columns, rows))
    truth = math.hypot(made.READING, made.BETWEEN_SESSIONS)
    precision = whole.estimate("intermediate_precision").interval
    assert precision is not None
    assert precision.lower > truth
    assert whole.warnings
    half = len(rows) // 2
    for part, bias in ((rows[:half], made.BIAS_BEFORE), (rows[half:], made.BIAS_AFTER)):
        one = evaluated("check-samples", (columns, part))
        assert one.estimate("intermediate_precision").value is None
        found = one.estimate("bias")
        assert found.value is not None
        assert found.standard_uncertainty is not None
        # Four standard uncertainties: the seed was not chosen.
        assert abs(found.value - bias) < 4 * found.standard_uncertainty
        assert abs(found.value - bias) < (made.BIAS_AFTER - made.BIAS_BEFORE) / 2


def test_a_steered_process_hides_the_change_of_the_calibration() -> None:
    """The readings stay at the set point while the truth runs off: they are no evidence of the process."""
    columns, rows = made.tables(made.SEED)["moisture-production"]
    readings = np.array([float(str(row[-1])) for row in rows])
    moved = readings[80:].mean() - readings[:80].mean()
    assert abs(moved) < (made.BIAS_AFTER - made.BIAS_BEFORE) / 2
    steered = evaluated("production", (columns, rows))
    assert {"lot_to_lot", "period_to_period"}.isdisjoint(each.name for each in steered.estimates)
    unsaid = evaluated("production", (columns, rows), {"steered_by_this_analyzer": False})
    assert "lot_to_lot" in {each.name for each in unsaid.estimates}


def test_every_file_is_given_with_its_study() -> None:
    codes = {about["code"] for about, _ in plant.design_studies()}
    assert codes == set(made.tables(made.SEED))


def test_the_increments_of_a_lot_are_worth_what_their_scheme_makes_of_them() -> None:
    """One series, three schemes and two plans: within a factor that a series of ten lots allows."""
    stream = made.tables(made.SEED)["moisture-stream"]
    for increments in (4, 12):
        found = evaluated("stream", stream, {**plant.INCREMENTS, "increments": increments})
        shown = found.diagnostics["sampling_standard_deviations"]
        truth = {scheme: increments_of_a_lot(increments, scheme) for scheme in shown}
        assert list(shown) == sorted(shown, key=truth.__getitem__, reverse=True)
        for scheme, figure in shown.items():
            assert figure == pytest.approx(truth[scheme], rel=0.3), (increments, scheme)


def test_the_error_of_the_analyzer_is_no_error_of_sampling() -> None:
    """Left in, it stands in the sampling error of every plan; the evaluation says so."""
    about = next(about for about, _ in plant.design_studies() if about["code"] == "moisture-stream")
    columns, rows = made.tables(made.SEED)["moisture-stream"]
    data = StudyData(columns, tuple(tuple(float(str(cell)) for cell in row) for row in rows))
    options = {**plant.INCREMENTS, "increments": 12}
    left_in = evaluate_study(about["design"], data, study=about["code"], options=options)
    taken_out = evaluated("stream", (columns, rows), options)
    assert "analyzer-not-taken-out" in {warning.code for warning in left_in.warnings}
    differing = left_in.estimate("sampling").variance - taken_out.estimate("sampling").variance
    assert differing == pytest.approx(made.READING**2 / 12, rel=0.3)
