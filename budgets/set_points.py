"""Set points: how near to the limit a process may run, and where it costs least."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from budgets.errors import LimitsError
from budgets.set_point_figures import Production, SetPointFigures
from budgets.set_point_search import SetPointSearch, Wanted

CURVE = 41


@dataclass(frozen=True)
class SetPoints:
    """The set points of a production, beside each other; all in the scale of the readings.

    Parameters
    ----------
    nearest : SetPointFigures or None
        Nearest the limit among those that keep what is wanted; None where no limit is run towards.
    lowest, highest : float, unit of the characteristic
        Between them every set point keeps what is wanted.
    nearest_bound_by : str or None
        What keeps the nearest one from running nearer: ``release_rate``, ``largest_risk`` or
        ``acceptance_limit``.
    cheapest : SetPointFigures or None
        Of the least expected cost within acceptance and ``largest_risk``; None without money.
    cheapest_bound_by : str or None
        ``acceptance_limit``, ``validated_range`` or ``largest_risk`` where money would pull further.
    today : SetPointFigures
    best_centre : SetPointFigures or None
        Of the highest release rate among those that keep what is wanted, for two limits; else None.
    without_drift : float or None, unit of the characteristic
        The nearest set point of a process without drift; None without drift, or without a limit to run
        towards.
    gain_of_nearest, gain_of_cheapest : float or None
        Per year against today.
    curve : tuple of SetPointFigures
    """

    nearest: SetPointFigures | None
    lowest: float
    highest: float
    nearest_bound_by: str | None
    cheapest: SetPointFigures | None
    cheapest_bound_by: str | None
    today: SetPointFigures
    best_centre: SetPointFigures | None
    without_drift: float | None
    gain_of_nearest: float | None
    gain_of_cheapest: float | None
    curve: tuple[SetPointFigures, ...]


def set_points(production: Production, wanted: Wanted) -> SetPoints:
    """Return the set points of a production.

    Parameters
    ----------
    production : Production
    wanted : Wanted

    Returns
    -------
    SetPoints

    Raises
    ------
    LimitsError
        If no set point keeps what is wanted, or the money would put the process beyond the law.

    Notes
    -----
    ``P(release) = Phi((A_U - m)/s_obs)`` for one look and one limit; the readings' distribution holds the
    error already. The optimum is constrained by the acceptance limits, within which the specific risk of a
    lot like the mean is that of the rule, and by the legal limit. Own derivation.
    """
    search = SetPointSearch(production, wanted)
    lowest, highest = search.kept()
    offset = production.measurement.reading_offset
    nearest = _at(production, search.nearest(lowest, highest))
    cheapest_centre = search.cheapest()
    cheapest = _at(production, cheapest_centre)
    today = production.figures_at(production.todays_centre)
    both = all(map(math.isfinite, production.tolerance))
    low, high = search.ends
    return SetPoints(
        nearest=nearest,
        lowest=lowest + offset,
        highest=highest + offset,
        nearest_bound_by=None if nearest is None else search.bound_of(nearest, wanted.release_rate),
        cheapest=cheapest,
        cheapest_bound_by=None if cheapest is None else search.bound_of(cheapest, None),
        today=today,
        best_centre=production.figures_at(search.best_centre(lowest, highest)) if both else None,
        without_drift=_without_drift(production, wanted),
        gain_of_nearest=gain_per_year(production, nearest, today),
        gain_of_cheapest=gain_per_year(production, cheapest, today),
        curve=production.figures(np.linspace(low, high, CURVE)),
    )


def gain_per_year(
    production: Production, there: SetPointFigures | None, today: SetPointFigures
) -> float | None:
    """Return what a set point is worth per year against another one; None without money.

    Parameters
    ----------
    production : Production
    there : SetPointFigures or None
    today : SetPointFigures

    Returns
    -------
    float or None
    """
    if production.money is None or there is None or there.cost is None or today.cost is None:
        return None
    return (today.cost - there.cost) * production.money.lots_per_year


def nearest_set_point(production: Production, wanted: Wanted) -> float:
    """Return the set point nearest the limit that keeps what is wanted.

    Parameters
    ----------
    production : Production
        That runs towards a limit.
    wanted : Wanted

    Returns
    -------
    float, unit of the characteristic
        In the scale of the readings.

    Raises
    ------
    LimitsError
        If no set point keeps it, or there is no limit to run towards.
    """
    search = SetPointSearch(production, wanted)
    centre = search.nearest(*search.kept())
    if centre is None:
        raise LimitsError("say towards which of the two limits", where=("towards",))
    return centre + production.measurement.reading_offset


def cheapest_set_point(production: Production, wanted: Wanted) -> SetPointFigures:
    """Return the set point of the least expected cost.

    Parameters
    ----------
    production : Production
        With money.
    wanted : Wanted
        Only its ``largest_risk`` counts.

    Returns
    -------
    SetPointFigures

    Raises
    ------
    LimitsError
        If the money would put the process beyond the law, no set point keeps the risk, or there is no money.
    """
    centre = SetPointSearch(production, wanted).cheapest()
    if centre is None:
        raise LimitsError("without money no set point costs less than another", where=("money",))
    return production.figures([centre])[0]


def _at(production: Production, centre: float | None) -> SetPointFigures | None:
    return None if centre is None else production.figures_at(centre)


def _without_drift(production: Production, wanted: Wanted) -> float | None:
    process = production.process
    steady = process.lot_to_lot > 0 or process.steering != 0
    if production.side == 0 or process.drift == 0 or not steady:
        return None
    return nearest_set_point(replace(production, process=replace(process, drift=0.0)), wanted)
