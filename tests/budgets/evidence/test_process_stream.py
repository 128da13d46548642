import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.signal import lfilter

from budgets.budget import Budget, Count, Procedure
from budgets.components import Component
from budgets.errors import ComponentError, EvidenceError, NotSupportedError
from budgets.evidence.study_data import NamedSource, StudyData, evaluate_study

PROCESS = {"held_sample": False, "lot_length": 200, "increments": 10, "scheme": "systematic"}
HELD = {"held_sample": True}


def evaluated(values, options, positions=None, **more):
    columns, rows = ("reading",), [(float(x),) for x in values]
    if positions is not None:
        columns, rows = (
            ("position", "reading"),
            [(float(p), *r) for p, r in zip(positions, rows, strict=True)],
        )
    return evaluate_study(
        "process_stream", StudyData(columns, tuple(rows)), study="ps", options=options, **more
    )


def autoregressive(seed, phi, size):
    noise = np.random.default_rng(seed).normal(0, math.sqrt(1 - phi * phi), size + 400)
    return 3 + lfilter([1], [1, -phi], noise)[400:]


def codes(evaluation):
    return [warning.code for warning in evaluation.warnings]


def test_independent_noise_is_that_of_its_standard_deviation():
    generator = np.random.default_rng(1)
    called = [codes(evaluated(generator.normal(3, 0.02, 400), HELD)) for _ in range(100)]
    assert sum("autocorrelated" in own for own in called) <= 6
    x = generator.normal(3, 0.02, 400)
    evaluation = evaluated(x, HELD)
    estimate = evaluation.estimate("repeatability")
    assert estimate.standard_uncertainty == pytest.approx(x.std(ddof=1), rel=0.02)
    assert estimate.degrees_of_freedom == pytest.approx(399, rel=0.15)
    assert estimate.may_feed[0] == "reading"
    assert estimate.interval.method == "chi-square"
    assert Component.from_estimate("noise", "moisture", None, estimate, "A").level == "reading"


def test_a_series_short_for_its_correlation_is_told():
    short = evaluated(autoregressive(8, 0.9, 200), HELD)
    (detail,) = [w.detail for w in short.warnings if w.code == "short-for-its-correlation"]
    # In truth worth 200 (1 - 0.9)/(1 + 0.9) = 10.5.
    assert "200 readings that follow one another so long are worth" in detail
    assert "short-for-its-correlation" not in codes(evaluated(autoregressive(3, 0.5, 200), HELD))
    # Also where successive readings seem independent: what follows later counts.
    wave = 0.5 * np.sin(2 * np.pi * np.arange(120) / 4) + HELD_X
    assert "short-for-its-correlation" not in codes(evaluated(wave, HELD))


@pytest.mark.parametrize(("phi", "number"), [(0.0, 1), (0.0, 40), (0.5, 20), (0.7, 1)])
def test_the_degrees_of_freedom_are_those_of_simulated_variances(phi, number):
    """2 mean^2 / variance of the variances of 200 series of 400; within what 200 series tell.

    Without correlation and number 1 they are n - 1 (JCGM 100:2008, 4.2.3 with G.3, from memory).
    """
    options = {**HELD, "readings_averaged": number}
    found = [evaluated(autoregressive(seed, phi, 400), options).estimate() for seed in range(200)]
    variances = np.array([estimate.variance for estimate in found])
    simulated = 2 * variances.mean() ** 2 / variances.var()
    stated = np.median([estimate.degrees_of_freedom for estimate in found])
    # Never too many by much; of a mean of readings that do not hang together too few.
    assert simulated / 2 < stated < simulated * 1.35


def test_a_mean_of_correlated_readings_is_worth_what_the_theory_says():
    phi, number = 0.8, 16
    k = np.arange(1, number)
    # n_eff = n / (1 + 2 sum (1 - k/n) rho_k) with rho_k = phi^k
    worth = number / (1 + 2 * ((1 - k / number) * phi**k).sum())
    found = [
        evaluated(autoregressive(seed, phi, 1000), {**HELD, "readings_averaged": number}).diagnostics[
            "effective_number_of_readings"
        ]
        for seed in range(60)
    ]
    assert np.mean(found) == pytest.approx(worth, rel=0.06)
    evaluation = evaluated(autoregressive(1, phi, 1000), {**HELD, "readings_averaged": number})
    assert evaluation.estimate().name == "averaged_repeatability"
    assert evaluation.estimate().may_feed[0] == "presentation"
    detail = next(w.detail for w in evaluation.warnings if w.code == "autocorrelated")
    assert "16 of them are worth" in detail
    assert "promises too much" in next(
        w.detail for w in evaluated(autoregressive(1, phi, 1000), HELD).warnings if w.code == "autocorrelated"
    )


def test_readings_that_go_against_the_one_before_average_better_than_independent_ones():
    evaluation = evaluated(autoregressive(1, -0.5, 1000), {**HELD, "readings_averaged": 16})
    assert evaluation.diagnostics["effective_number_of_readings"] > 16
    warnings = {w.code: w.detail for w in evaluated(autoregressive(1, -0.5, 1000), HELD).warnings}
    assert "a mean of several is better known" in warnings["autocorrelated"]
    assert "promises too much" not in warnings["autocorrelated"]


ALTERNATING = np.where(np.arange(400) % 2, 1.0, -1.0)
WITH_A_WAVE = ALTERNATING + 0.6 * np.cos(1.2 * np.arange(400))


@pytest.mark.parametrize(
    ("x", "number"), [(3 + ALTERNATING, 2), (3 + ALTERNATING, 10), (3 + WITH_A_WAVE, 10)]
)
def test_an_alternation_is_no_noise_that_an_average_could_be_credited_with(x, number):
    with pytest.raises(EvidenceError, match="it is no noise but an alternation") as caught:
        evaluated(x, {**HELD, "readings_averaged": number})
    assert caught.value.where == ("options", "readings_averaged")
    assert "short-for-its-correlation" not in {w.code for w in evaluated(x, HELD).warnings}


@pytest.mark.slow
@pytest.mark.parametrize(
    ("phi", "size", "options", "truth", "least"),
    [
        (0.8, 1000, {**HELD, "readings_averaged": 16}, 0.41065, 0.85),
        (0.95, 2000, {**PROCESS, "lot_length": 500, "increments": 25}, 0.0069588, 0.85),
        (
            0.95,
            2000,
            {**PROCESS, "lot_length": 500, "increments": 25, "scheme": "stratified"},
            0.0107765,
            0.85,
        ),
        (0.95, 2000, {**PROCESS, "lot_length": 1000, "increments": 4, "scheme": "random"}, 0.24044, 0.85),
    ],
)
def test_estimates_are_unbiased_and_intervals_hold_the_truth_about_as_often_as_documented(
    phi, size, options, truth, least
):
    """Truth: the sums and integrals over the known autocorrelation phi^k."""
    found = [evaluated(autoregressive(seed, phi, size), options).estimates[0] for seed in range(150)]
    assert np.mean([e.variance for e in found]) == pytest.approx(truth, rel=0.08)
    held = sum(e.interval.lower <= math.sqrt(truth) <= e.interval.upper for e in found)
    assert held >= least * 150


def test_the_analyzer_is_taken_out_of_the_sampling_variance(an_estimate):
    stream = autoregressive(7, 0.95, 2000)
    noisy = stream + np.random.default_rng(7).normal(0, 0.3, 2000)
    alone = evaluated(stream, PROCESS).estimate()
    source = NamedSource("analyzer_repeatability", an_estimate(variance=0.09))
    evaluation = evaluated(noisy, PROCESS, named_sources=[source])
    cleaned = evaluation.estimate()
    assert cleaned.terms[1].mean_square == source.estimate.terms[0].mean_square
    # 1/N, less the weight of a nugget that came out below the analyzer's variance
    assert cleaned.terms[1].coefficient == pytest.approx(-0.1, rel=0.06)
    assert cleaned.variance == pytest.approx(alone.variance, rel=0.25)
    assert evaluated(noisy, PROCESS).estimate().variance > cleaned.variance + 0.005
    assert (alone.contains, cleaned.contains) == (("sampling", "repeatability"), ("sampling",))
    assert cleaned.taken_out == ("repeatability",)
    assert cleaned.interval.method == "modified large-sample"
    assert "analyzer-not-taken-out" in codes(evaluated(noisy, PROCESS))
    assert "analyzer-not-taken-out" not in codes(evaluation)
    assert evaluation.diagnostics["nugget"] == pytest.approx(0.09, rel=0.5)


def test_a_nugget_with_the_analyzer_in_it_stands_beside_no_repeatability(an_estimate):
    """The analyzer's error would be counted twice; taken out of the nugget, it is wanted again."""
    stream = autoregressive(7, 0.95, 2000) + np.random.default_rng(7).normal(0, 0.3, 2000)
    repeatability = an_estimate(variance=0.09, contains=("repeatability",))
    named = [NamedSource("analyzer_repeatability", repeatability)]

    def budget(*sources, with_repeatability):
        sampling = evaluated(stream, PROCESS, named_sources=sources).estimate()
        parts = [Component.from_estimate("increments", "moisture", None, sampling, "A")]
        if with_repeatability:
            parts.append(Component.from_estimate("repeatability", "moisture", None, repeatability, "A"))
        once = Procedure(Count(1, 1, 1), Count(1, 1, 1))
        return Budget(tuple(parts), once, 0.95, None, "corrected", (0.0, 10.0))

    with pytest.raises(ComponentError, match="both contain repeatability"):
        budget(with_repeatability=True)
    with pytest.raises(ComponentError, match="repeatability was taken out of increments"):
        budget(*named, with_repeatability=False)
    levels = [part.level for part in budget(*named, with_repeatability=True).components]
    assert levels == ["sample", "reading"]


def test_the_effective_number_of_independent_values_is_no_answer_for_a_lot():
    """AR(1) 0.95, a lot of 1000, 50 systematic increments: true 0.058 sigma, by n_eff of the mean 0.204.

    n_eff speaks of the long-run mean of the process; the mean of this lot is known far better.
    """
    k, phi = np.arange(1, 50), 0.95
    long_run = math.sqrt((1 + 2 * ((1 - k / 50) * phi ** (20 * k)).sum()) / 50)
    assert long_run == pytest.approx(0.204, abs=0.0015)
    found = [
        evaluated(autoregressive(seed, phi, 4000), {**PROCESS, "lot_length": 1000, "increments": 50})
        for seed in range(20)
    ]
    mean_square = np.mean([evaluation.estimate().variance for evaluation in found])
    assert math.sqrt(mean_square) == pytest.approx(0.058, rel=0.08)


def test_an_analyzer_noisier_than_the_stream_leaves_nothing_usable(an_estimate):
    x = np.random.default_rng(8).normal(3, 0.1, 500)
    source = NamedSource("analyzer_repeatability", an_estimate(variance=0.02))
    evaluation = evaluated(x, PROCESS, named_sources=[source])
    assert not evaluation.estimate().usable
    assert "component-negative" in codes(evaluation)
    assert evaluation.diagnostics["equivalent_random_increments"] is None


def test_positions_give_the_step():
    x = autoregressive(9, 0.9, 500)
    one = evaluated(x, PROCESS)
    other = evaluated(x, {**PROCESS, "lot_length": 1000}, np.arange(500) * 5.0 + 1e5)
    assert other.diagnostics["step"] == 5
    assert one.estimate().variance == pytest.approx(other.estimate().variance)
    schemes = one.diagnostics["sampling_standard_deviations"]
    assert max(schemes["systematic"], schemes["stratified"]) < schemes["random"]
    assert schemes["systematic"] ** 2 == pytest.approx(one.estimate().variance)
    # Ten random increments are worth ten; systematic ones more.
    assert one.diagnostics["equivalent_random_increments"] > 10
    assert len(one.diagnostics["variogram"]) == 200


def test_a_cycle_near_the_steps_of_the_increments_is_told():
    wave = 1.5 * np.sin(2 * np.pi * np.arange(1000) / 20)
    x = autoregressive(10, 0.5, 1000) + wave
    meets = evaluated(x, PROCESS)
    assert "cycle-meets-increments" in codes(meets)
    assert meets.diagnostics["cycle_period"] == pytest.approx(20, rel=0.02)
    # All of the wave's variance 1.5^2/2 stays in the mean.
    assert meets.estimate().variance == pytest.approx(1.125, rel=0.25)
    assert "cycle" in codes(evaluated(x, {**PROCESS, "scheme": "stratified"}))
    apart = evaluated(x, {**PROCESS, "increments": 16})
    assert "cycle" in codes(apart) and apart.estimate().variance < 0.3


def test_increments_closer_than_the_readings_are_told():
    evaluation = evaluated(autoregressive(11, 0.9, 300), {**PROCESS, "lot_length": 8})
    assert "increments-closer-than-readings" in codes(evaluation)


@settings(max_examples=10, deadline=None)
@given(st.integers(0, 500), st.floats(-1e5, 1e5), st.floats(1e-3, 1e3), st.booleans())
def test_shift_and_scale_do_not_matter(seed, shift, scale, held):
    x = np.random.default_rng(seed).normal(size=300)
    options = HELD if held else PROCESS | {"lot_length": 100}
    one, other = evaluated(x, options), evaluated((x + shift) * scale, options)
    assert other.estimate().variance / scale**2 == pytest.approx(one.estimate().variance, rel=1e-5)
    # Read backwards a stationary series says the same.
    assert evaluated(x[::-1], options).estimate().variance == pytest.approx(one.estimate().variance, rel=1e-9)


X = np.random.default_rng(12).normal(3, 0.1, 60)
HELD_X = np.random.default_rng(12).normal(3, 0.1, 120)


@pytest.mark.parametrize(
    ("values", "options", "where", "match"),
    [
        (X, {}, ("options", "held_sample"), "held in place"),
        (X, {"held_sample": "yes"}, ("options", "held_sample"), "held in place"),
        ([3.0] * 60, HELD, ("rows",), "all readings are equal"),
        (X * 1e-200, {**PROCESS, "lot_length": 30}, ("rows",), "all readings are equal"),
        (X[:29], {**PROCESS, "lot_length": 10}, ("rows",), "29 readings; a series of a running process"),
        (HELD_X[:99], HELD, ("rows",), "99 readings; a series of a held sample is evaluated from 100 on"),
        (HELD_X, {**HELD, "readings_averaged": 13}, ("options", "readings_averaged"), "1 to 12"),
        (HELD_X, {**HELD, "scheme": "random"}, ("options", "scheme"), "does not belong"),
        (
            X,
            {**PROCESS, "lot_length": 30, "readings_averaged": 2},
            ("options", "readings_averaged"),
            "belong",
        ),
        (X, {**PROCESS, "lot_length": 31}, ("options", "lot_length"), "twice as long"),
        (X, {**PROCESS, "lot_length": math.inf}, ("options", "lot_length"), "above 0"),
        (X, {**PROCESS, "lot_length": 30, "increments": 2.5}, ("options", "increments"), "whole number"),
        (X, {**PROCESS, "lot_length": 30, "scheme": "zigzag"}, ("options", "scheme"), "one of random"),
        (np.arange(120) / 10, HELD, ("rows",), "drifted"),
    ],
)
def test_what_cannot_be_answered_is_refused(values, options, where, match):
    with pytest.raises(EvidenceError, match=match) as caught:
        evaluated(values, options)
    assert caught.value.where == where


def test_all_missing_options_are_named_at_once():
    with pytest.raises(EvidenceError) as caught:
        evaluated(X, {"held_sample": False})
    assert [fault.where[1] for fault in caught.value.each()] == ["lot_length", "increments", "scheme"]


def test_unequal_steps_are_named_by_their_row():
    positions = np.arange(120.0)
    positions[40:] += 1
    with pytest.raises(EvidenceError, match="a step of 2 among steps of 1") as caught:
        evaluated(HELD_X, HELD, positions)
    assert caught.value.where == ("rows", 40)
    with pytest.raises(EvidenceError, match="do not increase"):
        evaluated(HELD_X, HELD, positions[::-1])


def test_sources_that_cannot_be_taken_out_are_refused(an_estimate):
    good = NamedSource("analyzer_repeatability", an_estimate())
    with pytest.raises(EvidenceError, match="nothing is taken out"):
        evaluated(HELD_X, HELD, named_sources=[good])
    options = {**PROCESS, "lot_length": 30}
    with pytest.raises(NotSupportedError, match="presentation in a stream"):
        evaluated(X, options, named_sources=[NamedSource("presentation", an_estimate())])
    with pytest.raises(EvidenceError, match="named once"):
        evaluated(X, options, named_sources=[good, good])
    with pytest.raises(EvidenceError, match="not usable"):
        evaluated(
            X, options, named_sources=[NamedSource("analyzer_repeatability", an_estimate(usable=False))]
        )
