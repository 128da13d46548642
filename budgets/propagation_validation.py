"""Whether the law of propagation may be used: its coverage interval held against a Monte Carlo one."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import TypeVar

from budgets.budget import Budget
from budgets.budget_trials import budget_trials
from budgets.errors import LimitsError
from budgets.evidence.evaluation import Term
from budgets.evidence.mean_square_matrices import MatrixTerm
from budgets.monte_carlo import LARGEST_COVERAGE, MonteCarlo, monte_carlo
from budgets.pooled_trials import Progress
from budgets.propagation import CombinedUncertainty, Counts, combined, expanded_uncertainty
from budgets.reading_patterns import ReadingPattern

SHAPE_TOLERANCE = 0.05
"""Half a unit in the second digit of a standard uncertainty with the digits 10: the widest that two digits
allow. It is taken whatever the digits are, so that another unit gives the same verdict."""
FREEDOM_TOLERANCE = 0.2
"""Where degrees of freedom are finite: Student's t for every mean square (JCGM 101) is wider by conception
than one t with effective degrees of freedom (JCGM 100), without either being wrong. Up to a tenth of U."""
AnyTerm = TypeVar("AnyTerm", Term, MatrixTerm)

_PART_FOR_TRIALS = 5
_STANDARD_ERRORS = 3.0
_FIRST_TRIALS = 2**17
MOST_TRIALS = 10**7


def numerical_tolerance(standard_uncertainty: float, *, significant_digits: int = 2) -> float:
    """Return half a unit of the last digit of a standard uncertainty that is regarded as meaningful.

    Parameters
    ----------
    standard_uncertainty : float
        Above zero.
    significant_digits : int
        1 or 2 as a rule.

    Returns
    -------
    float
        ``delta = 10^l / 2`` for u = c 10^l, c an integer of so many digits.

    Raises
    ------
    LimitsError
        If the standard uncertainty is not above zero, or fewer than one digit is asked for.

    Notes
    -----
    Source: JCGM 101:2008, 7.9.2 (from memory).

    Examples
    --------
    >>> numerical_tolerance(0.00035), numerical_tolerance(0.0004, significant_digits=1)
    (5e-06, 5e-05)
    """
    if not (math.isfinite(standard_uncertainty) and standard_uncertainty > 0):
        raise LimitsError("a standard uncertainty must be above zero", where=("standard_uncertainty",))
    if significant_digits < 1:
        raise LimitsError("at least one digit is meaningful", where=("significant_digits",))
    # By its decimal digits, so that 0.9996 with two digits is 10 x 10^-1.
    exponent = int(f"{standard_uncertainty:.{significant_digits - 1}e}".partition("e")[2])
    return float(f"5e{exponent - significant_digits}")


@dataclass(frozen=True)
class PropagationValidation:
    """The law of propagation held against a Monte Carlo run.

    Parameters
    ----------
    agrees : bool
        Whether both ends of the interval differ by no more than the tolerance.
    estimate, standard_uncertainty : float, unit of the measurand
    expanded_uncertainty : float, unit of the measurand
    interval : tuple of float, shape (2,)
        ``y - U`` and ``y + U``.
    difference_low, difference_high : float, unit of the measurand
        From the ends of the probabilistically symmetric interval of the run.
    tolerance : float, unit of the measurand
    run : MonteCarlo
    shape : PropagationValidation or None
        The same with every variance taken as known: whether the model is linear enough and the error normal
        enough. None where they are known anyway, or the tolerance was given.
    """

    agrees: bool
    estimate: float
    standard_uncertainty: float
    expanded_uncertainty: float
    interval: tuple[float, float]
    difference_low: float
    difference_high: float
    tolerance: float
    run: MonteCarlo
    shape: PropagationValidation | None = None

    @property
    def sentence(self) -> str:
        """The finding in words."""
        digits = f".{max(0, 2 - math.floor(math.log10(self.tolerance)))}f" if self.tolerance < 1 else ".6g"

        def shown(ends: tuple[float, float]) -> str:
            return f"{ends[0]:{digits}} to {ends[1]:{digits}}"

        run = self.run
        found = (
            f"{run.trials} Monte Carlo trials give a {100 * run.coverage_probability:g} % coverage interval "
            f"from {shown(run.symmetric)}, the law of propagation one from {shown(self.interval)}. "
            f"Their ends differ by {self._difference}"
        )
        if self.shape is not None:
            found += f"; with all variances taken as known, by {self.shape._difference}"
        return f"{found}: the law of propagation is {'' if self.agrees else 'not '}validated here."

    @property
    def _difference(self) -> str:
        within = max(self.difference_low, self.difference_high) <= self.tolerance
        return (
            f"{self.difference_low:.2g} and {self.difference_high:.2g}, "
            f"{'within' if within else 'more than'} the tolerance of {self.tolerance:.2g}"
        )


def validate(
    budget: Budget,
    counts: Counts | ReadingPattern,
    *,
    estimates: Mapping[str, float] | None = None,
    seed: int,
    tolerance: float | None = None,
    trials: int | None = None,
    most_trials: int = MOST_TRIALS,
    probabilities: tuple[float, ...] = (),
    progress: Progress | None = None,
) -> PropagationValidation:
    """Validate the law of propagation for a budget at these estimates.

    Parameters
    ----------
    budget : Budget
    counts : Counts or ReadingPattern
    estimates : mapping of str to float or None
        As in `budgets.propagation.combined`.
    seed : int
    tolerance : float or None, unit of the measurand
        `numerical_tolerance` gives that of JCGM 101. None takes 5 % of the standard uncertainty with all
        variances known, and 20 % with the degrees of freedom that they have.
    trials : int or None
        None takes 131,072, and where these leave it open as many as hold a fifth of the
        tolerance.
    most_trials : int
    probabilities : tuple of float
        Of further quantiles of the run.
    progress : callable or None
        As in `budgets.monte_carlo.monte_carlo`.

    Returns
    -------
    PropagationValidation
        Unless the trials hold a fifth of the tolerance, three times what the ends of the run scatter by
        counts to their differences: it agrees only if it surely does. A coverage probability beyond what a
        run can show is held against that of 0.999.

    Raises
    ------
    ModelError, ComponentError, LimitsError
        As `combined` and `monte_carlo` raise them.

    Notes
    -----
    Source: JCGM 101:2008, 8.1.2, 8.1.3 and 8.2 (from memory).
    """
    law = combined(budget, counts, estimates=estimates)
    known = math.isinf(law.effective_degrees_of_freedom)

    def held(about: Budget, allowed: float) -> PropagationValidation:
        drawn = budget_trials(about, counts, estimates=estimates)
        own = combined(about, counts, estimates=estimates)

        def run(number: int | None) -> MonteCarlo:
            return monte_carlo(
                drawn,
                coverage_probability=min(budget.coverage_probability, LARGEST_COVERAGE),
                seed=seed,
                trials=number,
                tolerance=allowed / _PART_FOR_TRIALS if number is None else None,
                most_trials=most_trials,
                probabilities=probabilities,
                progress=progress,
            )

        found = _compared(about, own, run(trials or min(_FIRST_TRIALS, most_trials)), allowed)
        sure = trials is not None or _is_clear(found)
        return found if sure else _compared(about, own, run(None), allowed)

    u = law.standard_uncertainty
    if tolerance is not None or known:
        return held(budget, SHAPE_TOLERANCE * u if tolerance is None else tolerance)
    shape = held(_with_known_variances(budget), SHAPE_TOLERANCE * u)
    found = held(budget, FREEDOM_TOLERANCE * u)
    return replace(found, shape=shape, agrees=found.agrees and shape.agrees)


def _with_known_variances(budget: Budget) -> Budget:
    """Return the budget as if every mean square had infinite degrees of freedom."""
    return replace(
        budget,
        components=tuple(
            replace(
                component,
                terms=tuple(map(_known, component.terms)),
                relative_terms=tuple(map(_known, component.relative_terms)),
                matrix_terms=tuple(map(_known, component.matrix_terms)),
            )
            for component in budget.components
        ),
    )


def _known(term: AnyTerm) -> AnyTerm:
    return replace(term, mean_square=replace(term.mean_square, degrees_of_freedom=math.inf))


def _compared(
    budget: Budget, law: CombinedUncertainty, run: MonteCarlo, allowed: float
) -> PropagationValidation:
    u, y = law.standard_uncertainty, law.estimate or 0.0
    expanded = expanded_uncertainty(u, run.coverage_probability, law.effective_degrees_of_freedom)
    low, high = abs(run.symmetric[0] - (y - expanded)), abs(run.symmetric[1] - (y + expanded))
    unsure = _unsure(run)
    return PropagationValidation(
        agrees=low + unsure[0] <= allowed and high + unsure[1] <= allowed,
        estimate=y,
        standard_uncertainty=u,
        expanded_uncertainty=expanded,
        interval=(y - expanded, y + expanded),
        difference_low=low,
        difference_high=high,
        tolerance=allowed,
        run=run,
    )


def _is_clear(found: PropagationValidation) -> bool:
    """Say whether more trials could not turn the finding."""
    unsure = _unsure(found.run)
    beyond = max(found.difference_low - unsure[0], found.difference_high - unsure[1]) > found.tolerance
    return found.agrees or beyond


def _unsure(run: MonteCarlo) -> tuple[float, float]:
    """Return what the ends of a run may be off by, unless that is what its tolerance is for."""
    if run.holds_tolerance:
        return 0.0, 0.0
    if run.scatter is None:
        return math.inf, math.inf
    return _STANDARD_ERRORS * run.scatter.lower, _STANDARD_ERRORS * run.scatter.upper
