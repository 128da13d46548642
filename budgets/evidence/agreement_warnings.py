"""What an agreement study says in words about its pairs, its runs and its remainder."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

from budgets.evidence.agreement_options import CalibrationError
from budgets.evidence.evaluation import EvaluationWarning
from budgets.evidence.extreme_differences import Deviate
from budgets.evidence.remainder import NEEDED, Remainder
from budgets.evidence.validation_pairs import Pair

# ISO 12099:2017 (from memory): at least 20 samples for a validation.
_FEW_PAIRS = 20


def warnings_of_number(n: int) -> tuple[EvaluationWarning, ...]:
    """Say when there are few pairs."""
    if n >= _FEW_PAIRS:
        return ()
    detail = (
        f"{n} pairs are few: neither the bias nor the standard error of prediction is well known from them"
    )
    return (EvaluationWarning("few-pairs", detail),)


def warnings_of_runs(one_run: bool, known: bool) -> tuple[EvaluationWarning, ...]:
    """Say what one run of the reference method means for the bias."""
    if not one_run:
        return ()
    if known:
        detail = (
            "all reference values are of one run: its error is in the bias, its variance was added in full"
        )
        return (EvaluationWarning("one-run", detail),)
    detail = (
        "all reference values are of one run: its error is in the bias but not in its uncertainty; name "
        "the run-to-run standard deviation of the reference method (reference_run)"
    )
    return (EvaluationWarning("one-run-unknown", detail),)


def warnings_of_remainder(
    left: Remainder | None, sources: Mapping[str, object]
) -> tuple[EvaluationWarning, ...]:
    """Say why there is no remainder, or why it cannot be used."""
    if left is None:
        missing = " and ".join(name for name in NEEDED if name not in sources)
        detail = (
            f"no remainder is offered without {missing}; the standard error of prediction is used whole, and "
            "more readings do not make it smaller"
        )
        return (EvaluationWarning("remainder-not-offered", detail),)
    if left.estimate.usable:
        return ()
    detail = (
        "the remainder is not significantly above zero: it is shown with its interval but cannot be used; "
        "the standard error of prediction is used whole, with the repeatability beyond the study beside it"
    )
    return (EvaluationWarning("remainder-not-significant", detail),)


def warnings_of_averages(pairs: Sequence[Pair]) -> tuple[EvaluationWarning, ...]:
    """Say what averaged readings left out of the standard error of prediction."""
    if all(len(pair.readings) == 1 for pair in pairs):
        return ()
    detail = (
        "pairs have averaged readings, so the standard error of prediction holds only a part of the "
        "analyzer's repeatability: where it stands whole in a budget, repeatability_beyond_study belongs "
        "beside it"
    )
    return (EvaluationWarning("readings-averaged", detail),)


def warnings_of_extremes(
    found: Sequence[Deviate], pairs: Sequence[Pair], without: float | None
) -> tuple[EvaluationWarning, ...]:
    """Name the pairs that stand out together, and the standard error of prediction without them."""
    if not found:
        return ()
    names = ", ".join(pairs[deviate.index].label for deviate in found)
    detail = (
        f"the differences of pair {names} stand out (generalised test of extreme deviates, 5 %); without "
        f"them the standard error of prediction would be {without:.2g}. Set a pair aside for an assignable "
        "cause only; nothing was left out"
    )
    return (EvaluationWarning("extreme-differences", detail),)


def warnings_of_calibration(
    calibration: CalibrationError | None, deviation: float, degrees_of_freedom: int
) -> tuple[EvaluationWarning, ...]:
    """Say when the standard error of prediction is more than the calibration explains."""
    if calibration is None:
        return ()
    limit = calibration.confidence_limit(degrees_of_freedom)
    if deviation <= limit:
        return ()
    detail = (
        f"the standard error of prediction {deviation:.3g} is above {limit:.3g}, the most that the "
        f"calibration's own {calibration.standard_error:.3g} explains: the calibration does not hold for "
        "these samples as for its own"
    )
    return (EvaluationWarning("above-unexplained-error-limit", detail),)
