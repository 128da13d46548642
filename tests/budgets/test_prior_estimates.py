"""Priors from readings, studies and reference values: the truth of simulated plants within the intervals."""

import math
from dataclasses import replace

import numpy as np
import pytest

from budgets.conformity import Tolerance
from budgets.errors import EvidenceError, LimitsError
from budgets.evidence.evaluation import MeanSquare, Term
from budgets.evidence.study_data import StudyData, evaluate_study
from budgets.global_risks import nonconforming_share
from budgets.measurement_errors import MeasurementErrors
from budgets.prior_estimates import prior_of_readings, prior_of_reference_values, prior_of_study
from budgets.propagation import Counts, combined

ONE = Counts((1,))
# Of the budget of the fixture, one reading: repeatability and remainder, not the bias.
RANDOM = math.hypot(0.04, 0.05)


def readings(seed, lots=200, process=0.12, common=0.0):
    generator = np.random.default_rng(seed)
    return generator.normal(3.0, process, lots) + generator.normal(0, RANDOM, lots) + common


def study(rows, **options):
    columns = ("lot", "reading")
    return evaluate_study("production", StudyData(columns, tuple(rows)), study="pr", options=options)


def test_only_what_scatters_from_lot_to_lot_is_taken_out(a_budget):
    """Mathematics, rule 36: with the full u removed 0.12 would come out far too small."""
    found = [prior_of_readings(readings(seed, 400), a_budget(), ONE, steered=False) for seed in range(40)]
    mean_square = np.mean([item.prior.standard_deviation**2 for item in found])
    # 40 estimates of a variance, each with a relative deviation of about sqrt(2/399) (s_obs/s)^2
    assert mean_square == pytest.approx(0.12**2, rel=4 * math.sqrt(2 / 399) * 1.29 / math.sqrt(40))
    assert sum(item.interval_lower <= 0.12 <= item.interval_upper for item in found) >= 34
    one = found[0]
    assert one.removed_standard_deviation == pytest.approx(RANDOM)
    assert one.lots == 400 and one.prior.anchor == "readings" and one.warnings == ()
    assert one.prior.mean == pytest.approx(3.0, abs=0.03)


def test_calibration_and_reference_levels_are_not_taken_out(a_budget, a_component):
    """Mathematics, rule 36 [S]: with the full u removed, a true 0.12 is estimated as 0.066."""
    common = a_component("trueness", 0.1, level="reference", quantity="bias")
    budget = a_budget(components=(*a_budget().components[:2], common))
    step = math.sqrt(0.12**2 + RANDOM**2) * math.sqrt(199 / 200)
    found = prior_of_readings([3.0 - step, 3.0 + step] * 100, budget, ONE, steered=False)
    assert found.prior.standard_deviation == pytest.approx(0.12, rel=1e-9)
    whole = combined(budget, ONE).standard_uncertainty
    assert math.sqrt(found.observed_standard_deviation**2 - whole**2) == pytest.approx(0.066, abs=5e-4)


def test_a_common_error_moves_the_mean_and_not_the_spread(a_budget):
    moved = prior_of_readings(readings(1, common=0.2), a_budget(), ONE, steered=False)
    still = prior_of_readings(readings(1), a_budget(), ONE, steered=False)
    assert moved.prior.mean - still.prior.mean == pytest.approx(0.2)
    assert moved.prior.standard_deviation == pytest.approx(still.prior.standard_deviation)


def test_t_allows_for_the_number_of_lots(a_budget):
    normal = prior_of_readings(readings(3, 30), a_budget(), ONE, steered=False)
    t = prior_of_readings(readings(3, 30), a_budget(), ONE, steered=False, distribution="t")
    nu = normal.degrees_of_freedom
    assert t.prior.degrees_of_freedom == nu < 29
    factor = math.sqrt((1 + 1 / 30) * nu / (nu - 2))
    assert t.prior.standard_deviation == pytest.approx(normal.prior.standard_deviation * factor)
    with pytest.raises(LimitsError, match="more lots"):
        prior_of_readings([3.0, 3.1, 2.9, 3.05, 2.9], a_budget(), ONE, steered=False, distribution="t")


def test_the_empirical_prior_keeps_shape_and_takes_the_measurement_out(a_budget):
    generator = np.random.default_rng(5)
    skew = 3 + 0.12 * (generator.exponential(1.0, 2000) - 1) + generator.normal(0, RANDOM, 2000)
    found = prior_of_readings(skew, a_budget(), ONE, steered=False, distribution="empirical").prior
    assert found.standard_deviation == pytest.approx(0.12, rel=0.05)
    errors = MeasurementErrors.of(0.01)
    above, below = (
        nonconforming_share(replace(found, anchor="true_values"), errors, tolerance)
        for tolerance in (Tolerance(None, 3.3), Tolerance(2.7, None))
    )
    assert above > 10 * below
    with pytest.raises(EvidenceError, match="29 lots; a prior is made from 30 on"):
        prior_of_readings(skew[:29], a_budget(), ONE, steered=False, distribution="empirical")


def test_readings_that_vary_less_than_the_measurement_say_steering(a_budget):
    calm = 3.0 + 0.02 * np.sin(np.arange(50))
    with pytest.raises(EvidenceError, match=r"less than the measurement alone.*steered") as error:
        prior_of_readings(calm, a_budget(), ONE, steered=False)
    assert error.value.where == ("readings",)


def test_readings_that_hardly_vary_more_give_a_warning(a_budget):
    barely = 3.0 + np.random.default_rng(8).normal(0, 1.05 * RANDOM, 40)
    found = prior_of_readings(barely, a_budget(), ONE, steered=False)
    assert [warning.code for warning in found.warnings] == ["process-not-significant"]
    assert found.interval_lower == 0


@pytest.mark.parametrize(
    ("values", "words"),
    [
        ([3.0, 3.1, 3.2, 3.3], "4 lots"),
        ([3.0] * 20, "do not differ"),
        ([3.0, 3.1, math.nan, 3.2, 3.3], "finite"),
    ],
)
def test_what_shows_no_production_is_refused(a_budget, values, words):
    with pytest.raises(EvidenceError, match=words):
        prior_of_readings(values, a_budget(), ONE, steered=False)


def test_readings_of_a_steered_process_are_refused(a_budget):
    with pytest.raises(EvidenceError, match="reference values of lots"):
        prior_of_readings(readings(1), a_budget(), ONE, steered=True)


def test_a_study_gives_lots_and_periods_without_what_the_measurement_adds(a_budget):
    generator = np.random.default_rng(11)
    lots = generator.normal(3.03, 0.12, (300, 1)) + generator.normal(0, 0.05, (300, 1))
    table = lots + generator.normal(0, 0.04, (300, 2))
    rows = [(f"L{i}", float(x)) for i, row in enumerate(table) for x in row]
    found = prior_of_study(study(rows, steered_by_this_analyzer=False), a_budget())
    assert found.removed_standard_deviation == pytest.approx(0.05)  # the remainder, at level lot
    assert found.interval_lower < 0.12 < found.interval_upper
    # 3.03 was read; 0.03 of it is the bias that the budget corrects.
    assert found.prior.mean == pytest.approx(3.0, abs=0.03)
    single = study([rows[i] for i in range(0, 600, 2)], steered_by_this_analyzer=False)
    once = prior_of_study(single, a_budget(bias_treatment="in_guard_band"), distribution="t")
    assert once.removed_standard_deviation == pytest.approx(RANDOM)
    assert once.prior.mean == pytest.approx(3.03, abs=0.03)
    assert once.prior.distribution == "t"


def test_samples_read_twice_have_their_repeatability_taken_out_already(a_budget):
    generator = np.random.default_rng(12)
    rows = []
    for i in range(60):
        true = generator.normal(3.0, 0.12) + generator.normal(0, 0.05)
        rows += [(f"L{i}", "a", float(true + generator.normal(0, 0.04))) for _ in range(2)]
        rows += [] if i % 2 else [(f"L{i}", "b", float(true + generator.normal(0, 0.04))) for _ in range(2)]
    data = StudyData(("lot", "sample", "reading"), tuple(rows))
    options = {"steered_by_this_analyzer": False}
    found = prior_of_study(evaluate_study("production", data, study="pr", options=options), a_budget())
    assert found.removed_standard_deviation == pytest.approx(0.05)
    once = StudyData(data.columns, tuple(row for row in rows if row[1] == "a"))
    alone = prior_of_study(evaluate_study("production", once, study="pr", options=options), a_budget())
    assert alone.removed_standard_deviation == pytest.approx(0.05)


def test_studies_that_give_no_prior(a_budget):
    rows = [(f"L{i}", float(x)) for i, x in enumerate(readings(2, 40))]
    for options, words in (
        ({"steered_by_this_analyzer": True}, "reference values of lots"),
        ({}, "does not say whether the process is steered"),
    ):
        with pytest.raises(EvidenceError, match=words):
            prior_of_study(study(rows, **options), a_budget())
    free = study(rows, steered_by_this_analyzer=False)
    with pytest.raises(EvidenceError, match="normal prior or a t"):
        prior_of_study(free, a_budget(), distribution="empirical")
    pairs = StudyData(("sample", "result"), tuple((f"P{i // 2}", i % 3 + 0.1) for i in range(20)))
    other = evaluate_study("duplicates", pairs, study="du", options={})
    with pytest.raises(EvidenceError, match="not of the design duplicates"):
        prior_of_study(other, a_budget())


def steered_plant(lots, seed=21):
    """Return truth and reading of lots whose process is set by a first reading of the same analyzer error."""
    generator = np.random.default_rng(seed)
    error = generator.normal(0, 0.11, lots)
    before = generator.normal(3.0, 0.05, lots)
    truth = before - 0.95 * (before + error + generator.normal(0, 0.02, lots) - 3.0)
    return truth, truth + error + generator.normal(0, 0.02, lots)


def test_a_steered_process_is_known_from_reference_values(a_budget):
    truth, seen = steered_plant(4000)
    reference = truth + np.random.default_rng(2).normal(0, 0.03, 4000)
    term = Term(1.0, MeanSquare("lab", 0.03**2, 40))
    found = prior_of_reference_values(reference, term, readings=seen)
    assert found.prior.standard_deviation == pytest.approx(truth.std(), rel=0.02)
    assert found.prior.steering.correlation == pytest.approx(np.corrcoef(truth, seen)[0, 1], abs=0.03)
    assert found.prior.steering.correlation < 0
    # What the readings show is far less: an unsteered analysis would take it for the process.
    assert seen.std() < 0.5 * truth.std()
    with pytest.raises(EvidenceError, match="less than the measurement alone"):
        prior_of_readings(seen, a_budget(), ONE, steered=False)


def test_reference_values_alone_give_a_prior_of_an_unsteered_process():
    truth, _ = steered_plant(200)
    found = prior_of_reference_values(truth, None)
    assert found.prior.steering is None and found.prior.anchor == "true_values"
    assert found.prior.standard_deviation == pytest.approx(truth.std(ddof=1))
    assert found.removed_standard_deviation == 0


def test_reference_values_that_cannot_be():
    truth, seen = steered_plant(60)
    large = Term(1.0, MeanSquare("lab", 0.5**2, 40))
    with pytest.raises(EvidenceError, match="stated too large") as error:
        prior_of_reference_values(truth, large)
    assert error.value.where == ("references",)
    with pytest.raises(EvidenceError, match="59 readings of 60 lots"):
        prior_of_reference_values(truth, None, readings=seen[:-1])
    with pytest.raises(EvidenceError, match="do not differ"):
        prior_of_reference_values(truth, None, readings=np.full(60, 3.0))
    part = Term(1.0, MeanSquare("lab", 0.5 * float(truth.var()), 40))
    with pytest.raises(EvidenceError, match="more closely than"):
        prior_of_reference_values(truth, part, readings=truth)
