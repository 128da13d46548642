"""The conformance probability of one lot when what is known of the production counts too.

A prior is never needed to judge a lot, and where the reading contradicts it, it is left out: a lot that lies
where the production never was is the very one that must not be talked back.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from budgets.conformity import Tolerance
from budgets.distribution_tables import student_density
from budgets.errors import ModelError
from budgets.joint_laws import JointLaw, LimitRows
from budgets.measurement_errors import MeasurementErrors
from budgets.normal_risk_curves import NormalEstimates, is_normal
from budgets.production_laws import Production
from budgets.production_priors import ProductionPrior

LARGEST_CONFLICT = 3.0
"""Distance of a reading from the prior, in standard deviations, beyond which the prior is left out."""

_ROOT = math.sqrt(2 * math.pi)


@dataclass(frozen=True)
class PosteriorConformity:
    """What a prior says of one lot, beside its reading.

    Parameters
    ----------
    conformance_probability, specific_consumers_risk : float or None
        Given reading and prior; None where the prior was left out.
    conflict : float
        Distance between reading and prior in standard deviations of that distance.
    used : bool
        False where the conflict is larger than `LARGEST_CONFLICT`.
    """

    conformance_probability: float | None
    specific_consumers_risk: float | None
    conflict: float
    used: bool


def posterior_conformity(
    prior: ProductionPrior, errors: MeasurementErrors, tolerance: Tolerance, estimate: float
) -> PosteriorConformity:
    """Return the conformance probability of a lot given its estimate and the production prior.

    Parameters
    ----------
    prior : ProductionPrior
    errors : MeasurementErrors
    tolerance : Tolerance
    estimate : float, unit of the characteristic
        Reading minus bias, or the reading where the bias was left uncorrected.

    Returns
    -------
    PosteriorConformity

    Raises
    ------
    ModelError
        If the estimate is not a finite number.

    Notes
    -----
    Bayes' theorem with the likelihood of the estimate. Source: JCGM 106:2012, 6.2 and 7.2 (from memory); the
    conflict between reading and prior is common practice, no source.
    """
    if not math.isfinite(estimate):
        raise ModelError(f"the estimate must be a finite number, not {estimate}", where=("estimate",))
    production = Production(prior, errors, tolerance)
    law, shift = production.mean_law()
    rows = production.rows(estimate, estimate).moved(shift, 0.0)
    expected = law.intercept + law.slope * prior.mean
    scatter = math.hypot(law.slope * law.prior.standard_deviation, law.spread.at(prior.mean))
    conflict = abs(estimate - expected) / scatter
    if conflict > LARGEST_CONFLICT:
        return PosteriorConformity(None, None, conflict, used=False)
    conforming, risk = _normal(law, rows, estimate) if is_normal(law) else _summed(law, rows, estimate)
    return PosteriorConformity(conforming, risk, conflict, used=True)


def _normal(law: JointLaw, rows: LimitRows, estimate: float) -> tuple[float, float]:
    """Return the probabilities that the true value conforms, and does not, in closed form."""
    estimates = NormalEstimates.of(law)
    inside, outside = estimates.truths(np.array([[estimate]]), rows)
    return float(inside[0, 0]), float(outside[0, 0])


def _summed(law: JointLaw, rows: LimitRows, estimate: float) -> tuple[float, float]:
    """Return the same as a sum over the prior."""
    z, mass = law.nodes(rows)
    spread = np.hypot(law.spread.constant, law.spread.proportional * z)
    standardised = (estimate - law.intercept - law.slope * z) / spread
    nu = law.degrees_of_freedom
    likelihood = (
        np.exp(-0.5 * standardised**2) / _ROOT if math.isinf(nu) else student_density(standardised, nu)
    )
    mass = mass * likelihood / spread
    outside, inside = law.truths(z, rows)
    whole = float(mass.sum())
    return float((mass * inside).sum()) / whole, float((mass * outside).sum()) / whole
