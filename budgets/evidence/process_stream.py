"""Design ``process_stream``: a series of readings at equal steps, on a held sample or of the running process.

The two answer different questions. On a held sample the series shows the noise of the analyzer, and what a
mean of successive readings is worth. Of the running process it shows how the product varies along the
stream, and how far the mean of a few increments is from the mean of their lot.
"""

from __future__ import annotations

import math

import numpy as np

from budgets.errors import EvidenceError, raise_collected
from budgets.evidence.autocorrelation import MeanOfReadings, mean_of_readings
from budgets.evidence.evaluation import Evaluation, EvaluationWarning, MeanSquare, Term
from budgets.evidence.nested_means import component_estimate
from budgets.evidence.repeatability import precision_warnings, resolution_warnings
from budgets.evidence.stream_options import named_chi_square, not_taken, whole_number
from budgets.evidence.stream_sampling import sampling_of_process
from budgets.evidence.study_tables import Layout, Study
from budgets.evidence.sums import sum_of_squares
from budgets.evidence.variograms import Array
from budgets.levels import levels_from

LAYOUT = Layout(required=("reading",), optional=("position",), numbers=("reading", "position"))
OPTIONS = ("held_sample", "readings_averaged", "lot_length", "increments", "scheme")

LEAST_READINGS, MOST_READINGS = 30, 20_000
# Where readings follow one another fewer do not know how far: of 30 or 60 readings with a correlation of 0.8
# 95 % intervals hold the truth in 80 to 91 % of studies.
LEAST_HELD_READINGS = 100
# A held sample tells the noise when it lasts so many times as long as readings follow one another.
_TIMES_THE_CORRELATION = 10
# Positions may be off by this part of a step.
_UNEVEN = 0.05
_SHOWN_LAGS = 200
# A mean is studied on a series at least so many times as long.
_TEN = 10


def evaluate(study: Study) -> Evaluation:
    """Return what a series of readings at equal steps shows.

    Parameters
    ----------
    study : Study
        Columns of `LAYOUT`; without positions the step is 1. Options: ``held_sample``, true or false, must be
        said. On a held sample ``readings_averaged`` (1) successive readings make one result. Of the process,
        ``lot_length`` in the unit of the positions, ``increments`` taken from it, and the ``scheme``: random,
        stratified or systematic.

    Returns
    -------
    Evaluation
        On a held sample ``repeatability`` (of a mean: ``averaged_repeatability``); of the process
        ``sampling``, of the mean of the increments.

    Raises
    ------
    EvidenceError
        If an option is missing or not possible, the steps are unequal, the series too short, or constant.
    NotSupportedError
        If another source than the repeatability of the analyzer is named.

    Notes
    -----
    See `mean_of_readings` and `sampling_weights`. The degrees of freedom, of a variance estimated from a
    correlated series, are approximate. Of 100 readings on a held sample with a correlation of up to 0.8, and
    of a running process recorded for twice the length of a lot, 95 % intervals hold 93 to 98 % of the truths.
    """
    held = study.options.get("held_sample")
    if not isinstance(held, bool):
        raise EvidenceError(
            "say whether the readings are of one sample held in place (held_sample: true), which shows the "
            "noise of the analyzer, or of the running process (false), which shows the error of sampling",
            where=("options", "held_sample"),
        )
    readings = study.full("reading")
    if sum_of_squares(readings) == 0:
        raise EvidenceError("all readings are equal: they show no variation", where=("rows",))
    least = LEAST_HELD_READINGS if held else LEAST_READINGS
    if len(readings) < least:
        what = "of a held sample" if held else "of a running process"
        raise EvidenceError(
            f"{len(readings)} readings; a series {what} is evaluated from {least} on", where=("rows",)
        )
    step = _step(study)
    values = np.asarray(readings)
    return _of_held_sample(study, values) if held else sampling_of_process(study, values, step)


def _step(study: Study) -> float:
    """Return the step of the positions, checked to be the same throughout.

    Raises
    ------
    EvidenceError
        If they are not, or do not increase.
    """
    if "position" not in study.numbers:
        return 1.0
    steps = np.diff(np.asarray(study.full("position")))
    step = float(np.median(steps))
    if step <= 0:
        raise EvidenceError("the positions do not increase", where=("rows",))
    wrong = np.flatnonzero(np.abs(steps - step) > _UNEVEN * step)
    if len(wrong):
        row = study.rows[int(wrong[0]) + 1]
        raise EvidenceError(
            f"a step of {steps[wrong[0]]:g} among steps of {step:g}: a series has equal steps and no gaps",
            where=("rows", row),
        )
    return step


def _of_held_sample(study: Study, values: Array) -> Evaluation:
    faults = not_taken(study, ("lot_length", "increments", "scheme"), "a held sample")
    if study.named_sources:
        text = "a held sample shows the analyzer alone; nothing is taken out"
        faults.append(EvidenceError(text, where=("named_sources",)))
    raise_collected(faults)
    number = whole_number(study, "readings_averaged", 1, len(values) // _TEN, 1)
    found = mean_of_readings(values, number)
    name, levels = ("repeatability", levels_from("reading"))
    if number > 1:
        name, levels = ("averaged_repeatability", levels_from("presentation"))
    square = MeanSquare(f"{study.code}/{name}", found.variance, found.degrees_of_freedom)
    estimate = component_estimate(name, (Term(1.0, square),), levels, ("repeatability", "resolution"))
    single = math.sqrt(found.single_variance)
    return Evaluation(
        design="process_stream",
        estimates=(named_chi_square(estimate),),
        used=len(values),
        diagnostics={
            "held_sample": True,
            "readings": len(values),
            "readings_averaged": number,
            "standard_deviation_of_a_reading": single,
            "effective_number_of_readings": found.effective_number,
            "autocorrelations": list(found.autocorrelations[: _SHOWN_LAGS + 1]),
        },
        warnings=(
            *precision_warnings(len(values), found.degrees_of_freedom, of="readings"),
            *_warnings_of_dependence(found, number, len(values)),
            *resolution_warnings(single, study.decimals),
        ),
    )


def _warnings_of_dependence(found: MeanOfReadings, number: int, n: int) -> tuple[EvaluationWarning, ...]:
    warnings = []
    # Of readings that go against one another the sum is small or negative: they are worth more than n.
    length = 2 * math.fsum(found.autocorrelations) - 1
    if n < _TIMES_THE_CORRELATION * length:
        independent = n / length
        detail = (
            f"{n} readings that follow one another so long are worth {max(1.0, independent):.0f} independent "
            "ones: the figure is less well known than its interval says; record a longer series"
        )
        warnings.append(EvaluationWarning("short-for-its-correlation", detail))
    first = found.autocorrelations[1] if len(found.autocorrelations) > 1 else 0.0
    # 1 % of the series of independent values lie beyond 2.58 standard deviations of their autocorrelation.
    if abs(first) < 2.58 / math.sqrt(n):
        return tuple(warnings)
    detail = f"successive readings are not independent (autocorrelation {first:.2f}): "
    if number > 1:
        detail += f"{number} of them are worth {found.effective_number:.1f}"
    elif first < 0:
        detail += (
            "each goes against the one before it, so a mean of several is better known than a budget that "
            "averages them as if they were independent says; say how many are averaged (readings_averaged)"
        )
    else:
        detail += (
            "a budget that averages them as if they were promises too much; say how many are averaged "
            "(readings_averaged) and use the mean as one reading"
        )
    return (*warnings, EvaluationWarning("autocorrelated", detail))
