"""The lines of a validation set: the slope and its test, and the lines with errors on both sides."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from scipy.special import chdtrc

from budgets.errors import ConvergenceError
from budgets.evidence.agreement_options import AgreementOptions
from budgets.evidence.errors_in_variables import (
    FittedLine,
    LineOfKnownRatio,
    line_with_known_ratio,
    line_with_uncertainties,
)
from budgets.evidence.evaluation import EvaluationWarning, MeanSquare, Term, json_able, variance
from budgets.evidence.slope_test import SlopeTest, slope_test
from budgets.evidence.validation_pairs import Pair

_SIGNIFICANT = 0.05


@dataclass(frozen=True)
class AgreementLines:
    """The lines through the pairs, each None where the study cannot tell.

    Parameters
    ----------
    slope : SlopeTest or None
    known_ratio : LineOfKnownRatio or None
        Reference over reading.
    ratio_from : str
        ``option`` or ``study``.
    individual : FittedLine or None
        With the uncertainties that the study states pair by pair, or that follow from unequal replicates.
    """

    slope: SlopeTest | None
    known_ratio: LineOfKnownRatio | None
    ratio_from: str
    individual: FittedLine | None

    def to_document(self) -> dict[str, Any]:
        """Return the lines as JSON-able members."""
        return {
            "slope_test": None if self.slope is None else self.slope.to_document(),
            "line_with_known_ratio": self._known_ratio(),
            "line_with_individual_uncertainties": self._individual(),
        }

    def _known_ratio(self) -> dict[str, Any] | None:
        line = self.known_ratio
        if line is None:
            return None
        document: dict[str, Any] = json_able(
            {
                "error_variance_ratio": line.ratio,
                "direction": "variance of the reference's errors over that of the analyzer's",
                "ratio_from": self.ratio_from,
                "slope": line.slope,
                "slope_lower": line.lower,
                "slope_upper": line.upper,
                "intercept": line.intercept,
                "p_value": line.p_value,
            }
        )
        return document

    def _individual(self) -> dict[str, Any] | None:
        line = self.individual
        if line is None:
            return None
        document: dict[str, Any] = json_able(
            {
                "slope": line.slope,
                "slope_standard_uncertainty": line.slope_standard_uncertainty,
                "intercept": line.intercept,
                "intercept_standard_uncertainty": line.intercept_standard_uncertainty,
                "covariance": line.covariance,
                "chi_square": line.sum_of_squares,
                "degrees_of_freedom": line.degrees_of_freedom,
                "p_value": _chi_square_p(line),
            }
        )
        return document

    def warnings(self) -> tuple[EvaluationWarning, ...]:
        """Put into words what the lines say."""
        found = []
        if self.slope is None:
            detail = "the readings do not differ, or are too few: nothing can be said about the slope"
            found.append(EvaluationWarning("no-slope", detail))
        elif self.slope.p_value < _SIGNIFICANT:
            detail = (
                f"the slope of reference on reading is {self.slope.slope:.3f} (p = {self.slope.p_value:.2g} "
                "for a slope of 1): the bias depends on the level, and one figure for it is not enough"
            )
            found.append(EvaluationWarning("slope-significant", detail))
        if self.individual is not None and _chi_square_p(self.individual) < _SIGNIFICANT:
            detail = (
                "the pairs scatter about their line more than the standard uncertainties stated for them "
                "explain: these leave something out"
            )
            found.append(EvaluationWarning("individual-uncertainties-too-small", detail))
        return tuple(found)


def _chi_square_p(line: FittedLine) -> float:
    return float(chdtrc(line.degrees_of_freedom, line.sum_of_squares))


def agreement_lines(
    pairs: Sequence[Pair],
    square: MeanSquare,
    sources: Mapping[str, tuple[Term, ...]],
    options: AgreementOptions,
) -> AgreementLines:
    """Fit the lines that the study has the means for.

    Parameters
    ----------
    pairs : sequence of Pair
    square : MeanSquare
        SEP^2.
    sources : mapping of str to tuple of Term
        Variances of one draw of what is known.
    options : AgreementOptions

    Returns
    -------
    AgreementLines

    Notes
    -----
    Whatever is not the reference's repeatability or run is counted on the analyzer's side.
    """
    readings, references = [pair.reading for pair in pairs], [pair.reference for pair in pairs]
    slope = slope_test(readings, references)
    if slope is None:
        return AgreementLines(None, None, "", None)
    of_reference = _reference_variances(pairs, sources)
    ratio, ratio_from = options.error_variance_ratio, "option"
    if ratio is None and of_reference is not None:
        share = math.fsum(of_reference) / len(pairs) / square.value
        ratio, ratio_from = (share / (1 - share) if share < 1 else None), "study"
    return AgreementLines(
        slope,
        None if ratio is None else line_with_known_ratio(readings, references, ratio),
        ratio_from,
        _individual_line(pairs, square, sources, of_reference),
    )


def _reference_variances(
    pairs: Sequence[Pair], sources: Mapping[str, tuple[Term, ...]]
) -> list[float] | None:
    """Return the variance of every mean reference value, as far as it scatters between pairs."""
    if "reference_repeatability" not in sources:
        return None
    within = variance(sources["reference_repeatability"])
    several_runs = len({pair.run for pair in pairs}) > 1
    run = variance(sources["reference_run"]) if several_runs and "reference_run" in sources else 0.0
    return [within / len(pair.references) + run for pair in pairs]


def _individual_line(
    pairs: Sequence[Pair],
    square: MeanSquare,
    sources: Mapping[str, tuple[Term, ...]],
    of_reference: Sequence[float] | None,
) -> FittedLine | None:
    variances = _stated_variances(pairs) or _variances_of_replicates(pairs, square, sources, of_reference)
    if variances is None:
        return None
    u_x, u_y = ([math.sqrt(v) for v in side] for side in variances)
    try:
        return line_with_uncertainties([p.reading for p in pairs], [p.reference for p in pairs], u_x, u_y)
    except ConvergenceError:
        # No line is preferred: the pairs do not determine a slope.
        return None


def _stated_variances(pairs: Sequence[Pair]) -> tuple[list[float], list[float]] | None:
    of_reading = [p.reading_standard_uncertainty for p in pairs]
    of_reference = [p.reference_standard_uncertainty for p in pairs]
    if None in of_reading or None in of_reference:
        return None
    return [u * u for u in of_reading if u is not None], [u * u for u in of_reference if u is not None]


def _variances_of_replicates(
    pairs: Sequence[Pair],
    square: MeanSquare,
    sources: Mapping[str, tuple[Term, ...]],
    of_reference: Sequence[float] | None,
) -> tuple[list[float], list[float]] | None:
    """Return the variances of either side where unequal replicates make them differ from pair to pair."""
    equal = len({(len(pair.readings), len(pair.references)) for pair in pairs}) == 1
    if equal or of_reference is None or "analyzer_repeatability" not in sources:
        return None
    within = variance(sources["analyzer_repeatability"])
    of_readings = [within / len(pair.readings) for pair in pairs]
    known = (math.fsum(of_readings) + math.fsum(of_reference)) / len(pairs)
    rest = max(0.0, square.value - known)
    return [rest + v for v in of_readings], list(of_reference)
