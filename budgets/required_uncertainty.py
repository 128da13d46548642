"""The uncertainty that a wanted set point needs."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from scipy.optimize import brentq

from budgets.budget import Budget
from budgets.errors import EmptyAcceptanceError, LimitsError
from budgets.lot_procedures import Demand, LotProcedure
from budgets.planned_measurements import planned_measurement, scaled
from budgets.process_variation import ProcessVariation
from budgets.set_point_figures import Production
from budgets.set_point_search import Wanted

_SMALLEST, _LARGEST = 1e-4, 16.0
_PRECISION = 1e-9


@dataclass(frozen=True)
class RequiredUncertainty:
    """How uncertain a measurement may be for a set point to keep what is wanted.

    Parameters
    ----------
    set_point : float, unit of the characteristic
        In the scale of the readings.
    factor : float
        On every standard uncertainty of the budget; above 1 where the measurement is better than needed.
    standard_uncertainty : float, unit of the characteristic
        Combined, of the first look, at that factor.
    todays_standard_uncertainty : float, unit of the characteristic
    """

    set_point: float
    factor: float
    standard_uncertainty: float
    todays_standard_uncertainty: float


def required_uncertainty(
    budget: Budget,
    procedure: LotProcedure,
    demands: Sequence[Demand],
    process: ProcessVariation,
    wanted: Wanted,
    set_point: float,
) -> RequiredUncertainty:
    """Return the largest uncertainty with which a set point keeps release rate and risk.

    Parameters
    ----------
    budget : Budget
    procedure : LotProcedure
    demands : sequence of Demand
    process : ProcessVariation
    wanted : Wanted
    set_point : float, unit of the characteristic
        In the scale of the readings.

    Returns
    -------
    RequiredUncertainty

    Raises
    ------
    LimitsError
        If no uncertainty is small enough: the process itself varies too much there, or the set point lies
        outside of what can be accepted at all.

    Notes
    -----
    All components are multiplied by one factor, at their degrees of freedom. Own derivation.
    """

    def slack(factor: float) -> float:
        try:
            measurement = planned_measurement(scaled(budget, factor), procedure, demands)
        except EmptyAcceptanceError:
            return -1.0
        centre = set_point - measurement.reading_offset
        low, high = measurement.centres
        if not low <= centre <= high:
            return -1.0
        found = Production(process, measurement).outcomes([centre])
        kept = float(found.release_rate[0]) - wanted.release_rate
        if wanted.largest_risk is None:
            return kept
        return min(kept, wanted.largest_risk - float(found.conditional_global_consumers_risk[0]))

    today = planned_measurement(budget, procedure, demands)
    if slack(_SMALLEST) < 0:
        raise LimitsError(
            f"no uncertainty is small enough for the set point {set_point:.5g}: even an exact measurement "
            f"would not keep what is wanted there; the process varies by "
            f"{process.unsteered_standard_deviation:.3g}, and a set point lies inside tolerance",
            where=("wanted_set_point",),
        )
    factor = _LARGEST
    if slack(_LARGEST) < 0:
        # Continuous but for a jump where nothing is accepted any more: the bracket ends on its kept side.
        factor = float(brentq(slack, _SMALLEST, _LARGEST, xtol=_PRECISION, rtol=_PRECISION))
        factor = factor if slack(factor) >= 0 else factor * (1 - 4 * _PRECISION)
    return RequiredUncertainty(
        set_point, factor, today.standard_uncertainty * factor, today.standard_uncertainty
    )
