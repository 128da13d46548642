"""Design ``fleet``: the same samples read on several instruments of one kind."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from itertools import combinations

from scipy.special import fdtrc

from budgets.errors import EvidenceError, raise_collected
from budgets.evidence.evaluation import Estimate, Evaluation, EvaluationWarning, MeanSquare, Term, variance
from budgets.evidence.nested_means import component_estimate
from budgets.evidence.repeatability import (
    finding_warnings,
    precision_warnings,
    repeatability_estimate,
    resolution_warnings,
)
from budgets.evidence.screening import Finding, cochran_findings
from budgets.evidence.study_tables import Layout, Study
from budgets.evidence.sums import CONFIDENCE, grouped, mean, sum_of_squares
from budgets.levels import levels_from

LAYOUT = Layout(required=("sample", "instrument", "reading"), optional=("replicate",), numbers=("reading",))

_FEW_INSTRUMENTS = 5
_Cells = Mapping[tuple[str, str], Sequence[float]]


def evaluate(study: Study) -> Evaluation:
    """Return how far instruments of one kind differ, beyond their repeatability.

    Parameters
    ----------
    study : Study
        Columns of `LAYOUT`: every sample on every instrument, one or several readings each.

    Returns
    -------
    Evaluation
        Estimates ``between_instruments`` and, where anything was read twice, ``sample_by_instrument`` and
        ``repeatability``.

    Raises
    ------
    EvidenceError
        If a sample is missing on an instrument, there are fewer than two of either, or nothing scatters.

    Notes
    -----
    Two-way analysis of variance with both factors random, on the means of the cells:
    ``E MS_instrument = a s_i^2 + s_si^2 + h s_r^2``, ``E MS_interaction = s_si^2 + h s_r^2`` for a samples, h
    the mean of 1/(readings of a cell). Exact for equal numbers; for unequal ones it is the analysis of
    unweighted means. Source: ISO 5725-3:1994, Annex B (from memory) for the expected mean squares.
    """
    cells = _checked_cells(study)
    samples = list(dict.fromkeys(sample for sample, _ in cells))
    instruments = list(dict.fromkeys(instrument for _, instrument in cells))
    a, b = len(samples), len(instruments)
    # From one offset on, so that a large common level costs no digits.
    first = next(iter(cells.values()))[0]
    means = {cell: mean([value - first for value in values]) for cell, values in cells.items()}
    rows = [mean([means[sample, own] for own in instruments]) for sample in samples]
    columns = [mean([means[sample, own] for sample in samples]) for own in instruments]
    centre = mean(columns)
    squares = math.fsum(
        (means[sample, own] - rows[i] - columns[j] + centre) ** 2
        for i, sample in enumerate(samples)
        for j, own in enumerate(instruments)
    )
    between = MeanSquare(f"{study.code}/instruments", a * sum_of_squares(columns) / (b - 1), b - 1)
    freedom = (a - 1) * (b - 1)
    # Below the last digits of the cell means there is only their rounding.
    noise = freedom * (8 * math.ulp(max(map(abs, means.values())))) ** 2
    if squares <= noise:
        raise EvidenceError(
            "the instruments differ by the same amount on every sample to the last digit: copied readings, "
            "or one instrument named twice",
            where=("rows",),
        )
    interaction = MeanSquare(f"{study.code}/samples_by_instruments", squares / freedom, freedom)
    pooled, pooled_freedom = _within(cells)
    estimates = _estimates(study.code, a, between, interaction, cells, pooled, pooled_freedom)
    findings = cochran_findings([(" on ".join(cell), values) for cell, values in cells.items()])
    f = between.value / interaction.value
    significance = float(fdtrc(b - 1, freedom, f))
    return Evaluation(
        design="fleet",
        estimates=estimates,
        used=len(study.rows),
        diagnostics={
            "samples": a,
            "instruments": b,
            "deviations_of_instruments": {
                own: column - centre for own, column in zip(instruments, columns, strict=True)
            },
            # u of a deviation from the mean of the fleet, for an instrument that is in the study
            "standard_uncertainty_of_a_deviation": math.sqrt(interaction.value * (1 - 1 / b) / a),
            "mean_square_between_instruments": between.value,
            "mean_square_samples_by_instruments": interaction.value,
            "f_statistic": f,
            "f_p_value": significance,
            "findings": [found.to_document() for found in findings],
        },
        warnings=(
            *_warnings_of_instruments(b, estimates[0], significance),
            *_warnings_of_copies(samples, instruments, cells),
            *_warnings_of_repeatability(study, cells, pooled, pooled_freedom, findings),
            *_warnings_of_interaction(estimates),
        ),
    )


def _checked_cells(study: Study) -> _Cells:
    readings = study.full("reading")
    if len(set(readings)) == 1:
        raise EvidenceError("all readings are equal; they say nothing about instruments", where=("rows",))
    samples, instruments = study.labels["sample"], study.labels["instrument"]
    for name, labels in (("sample", samples), ("instrument", instruments)):
        if len(set(labels)) < 2:
            raise EvidenceError(f"a fleet study needs two {name}s at least", where=("rows",))
    if "replicate" in study.labels:
        keys = list(zip(samples, instruments, study.labels["replicate"], strict=True))
        if len(set(keys)) < len(keys):
            raise EvidenceError("a sample has one replicate twice on the same instrument", where=("rows",))
    cells = grouped(list(zip(samples, instruments, strict=True)), readings)
    raise_collected(
        [
            EvidenceError(
                f"sample {sample} was not read on instrument {instrument}; every sample is read on every "
                "instrument, or set aside",
                where=("rows",),
            )
            for sample in dict.fromkeys(samples)
            for instrument in dict.fromkeys(instruments)
            if (sample, instrument) not in cells
        ]
    )
    return cells


def _within(cells: _Cells) -> tuple[float, int]:
    freedom = sum(len(values) - 1 for values in cells.values())
    if not freedom:
        return 0.0, 0
    return math.fsum(sum_of_squares(values) for values in cells.values()) / freedom, freedom


def _estimates(
    code: str,
    samples: int,
    between: MeanSquare,
    interaction: MeanSquare,
    cells: _Cells,
    pooled: float,
    pooled_freedom: int,
) -> tuple[Estimate, ...]:
    instrument = component_estimate(
        "between_instruments",
        (Term(1 / samples, between), Term(-1 / samples, interaction)),
        levels_from("instrument"),
        ("instrument",),
    )
    if not pooled:
        return (instrument,)
    repeatability = repeatability_estimate(code, pooled, pooled_freedom, levels_from("reading"))
    h = math.fsum(1 / len(values) for values in cells.values()) / len(cells)
    by_sample = component_estimate(
        "sample_by_instrument",
        (Term(1.0, interaction), Term(-h, repeatability.terms[0].mean_square)),
        levels_from("lot"),
        # What an instrument reads differently on single samples is in its standard error of prediction too.
        ("remainder",),
    )
    return instrument, by_sample, repeatability


def _warnings_of_instruments(
    number: int, estimate: Estimate, significance: float
) -> tuple[EvaluationWarning, ...]:
    warnings = []
    if number < _FEW_INSTRUMENTS:
        detail = (
            f"{number} instruments say little about a fleet: its spread has {number - 1} degrees of freedom"
        )
        warnings.append(EvaluationWarning("few-instruments", detail))
    if not estimate.usable:
        detail = (
            f"the variance between instruments came out as {variance(estimate.terms):.3g}, which means zero: "
            "the instruments differ no more than their readings do; it is shown but cannot be used"
        )
        warnings.append(EvaluationWarning("component-negative", detail))
    elif significance > 1 - CONFIDENCE:
        detail = (
            f"the instruments do not differ significantly (p = {significance:.2g}), which does not show that "
            "they are equal: the component stays"
        )
        warnings.append(EvaluationWarning("instruments-not-significant", detail))
    return tuple(warnings)


def _warnings_of_copies(
    samples: Sequence[str], instruments: Sequence[str], cells: _Cells
) -> tuple[EvaluationWarning, ...]:
    return tuple(
        EvaluationWarning(
            "identical-readings",
            f"the instruments {first} and {second} show the same readings throughout: one was copied",
        )
        for first, second in combinations(instruments, 2)
        if all(list(cells[sample, first]) == list(cells[sample, second]) for sample in samples)
    )


def _warnings_of_repeatability(
    study: Study, cells: _Cells, pooled: float, freedom: int, findings: list[Finding]
) -> tuple[EvaluationWarning, ...]:
    if not pooled:
        detail = (
            "no sample was read twice on one instrument (or the display hides the scatter): repeatability "
            "and the differences on single samples cannot be told apart"
        )
        return (EvaluationWarning("no-replicates", detail),)
    unequal: tuple[EvaluationWarning, ...] = ()
    if len({len(values) for values in cells.values()}) > 1:
        detail = "the numbers of readings differ: the evaluation by unweighted means is approximate"
        unequal = (EvaluationWarning("unequal-numbers", detail),)
    return (
        *precision_warnings(len(study.rows), freedom),
        *unequal,
        *resolution_warnings(math.sqrt(pooled), study.decimals),
        *finding_warnings(findings),
    )


def _warnings_of_interaction(estimates: Sequence[Estimate]) -> tuple[EvaluationWarning, ...]:
    if len(estimates) == 1 or estimates[1].usable:
        return ()
    detail = (
        f"the variance of sample by instrument came out as {estimates[1].variance:.3g}, which means zero: it "
        "is shown but cannot be used"
    )
    return (EvaluationWarning("component-negative", detail),)
