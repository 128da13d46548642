"""What a release rule knows of the production, as plain numbers for the record."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from budgets.conformity import Tolerance
from budgets.evidence.evaluation_terms import finite_or_none
from budgets.level_dependence import LevelDependence
from budgets.measurement_errors import MeasurementErrors
from budgets.posterior_conformity import PosteriorConformity, posterior_conformity
from budgets.production_priors import ProductionPrior, Steering


@dataclass(frozen=True)
class KnownProduction:
    """A production prior, the errors of the measurement, and what the acceptance limits come to with both.

    Parameters
    ----------
    prior : ProductionPrior
    errors : MeasurementErrors
    global_consumers_risk, global_producers_risk : float
        Of the acceptance limits of the rule; means over the common error.
    release_rate : float
    """

    prior: ProductionPrior
    errors: MeasurementErrors
    global_consumers_risk: float
    global_producers_risk: float
    release_rate: float

    def posterior(self, tolerance: Tolerance, estimate: float) -> PosteriorConformity:
        """Return what the prior says of one lot.

        Parameters
        ----------
        tolerance : Tolerance
        estimate : float, unit of the characteristic

        Returns
        -------
        PosteriorConformity

        Raises
        ------
        ModelError
            If the estimate is not a finite number.
        """
        return posterior_conformity(self.prior, self.errors, tolerance, estimate)

    def to_document(self) -> dict[str, Any]:
        """Return the figures as JSON-able members; null stands for infinite degrees of freedom."""
        errors = self.errors
        return {
            "prior": prior_document(self.prior),
            "errors": {
                "random": dict(vars(errors.random)),
                "common": dict(vars(errors.common)),
                "degrees_of_freedom": finite_or_none(errors.degrees_of_freedom),
                "bias": errors.bias,
            },
            "global_consumers_risk": self.global_consumers_risk,
            "global_producers_risk": self.global_producers_risk,
            "release_rate": self.release_rate,
        }

    @classmethod
    def from_document(cls, document: Mapping[str, Any]) -> KnownProduction:
        """Return what `to_document` wrote, to the last bit."""
        errors = document["errors"]
        return cls(
            prior_from_document(document["prior"]),
            MeasurementErrors(
                LevelDependence(**errors["random"]),
                LevelDependence(**errors["common"]),
                _infinite_or(errors["degrees_of_freedom"]),
                errors["bias"],
            ),
            document["global_consumers_risk"],
            document["global_producers_risk"],
            document["release_rate"],
        )


def prior_document(prior: ProductionPrior) -> dict[str, Any]:
    """Return a prior as JSON-able members.

    Parameters
    ----------
    prior : ProductionPrior

    Returns
    -------
    dict
    """
    steering = prior.steering
    return {
        "distribution": prior.distribution,
        "mean": prior.mean,
        "standard_deviation": prior.standard_deviation,
        "degrees_of_freedom": finite_or_none(prior.degrees_of_freedom),
        "values": list(prior.values),
        "anchor": prior.anchor,
        "steering": None if steering is None else dict(vars(steering)),
    }


def prior_from_document(document: Mapping[str, Any]) -> ProductionPrior:
    """Return the prior that `prior_document` wrote.

    Parameters
    ----------
    document : mapping

    Returns
    -------
    ProductionPrior
    """
    steering = document["steering"]
    return ProductionPrior(
        document["distribution"],
        document["mean"],
        document["standard_deviation"],
        _infinite_or(document["degrees_of_freedom"]),
        tuple(document["values"]),
        document["anchor"],
        None if steering is None else Steering(**steering),
    )


def _infinite_or(value: float | None) -> float:
    return math.inf if value is None else value
