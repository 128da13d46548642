"""What an agreement study takes beside its table."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from budgets.errors import BudgetsError, EvidenceError, raise_collected
from budgets.evidence.sums import CONFIDENCE, f_quantile

_OF_CALIBRATION = ("standard_error_of_calibration", "calibration_samples", "latent_variables")
# Beyond it one side has no errors to speak of, and an ordinary regression is meant.
_LARGEST_RATIO = 1e6
OPTIONS = (
    "independent",
    "presentations_per_pair",
    "tolerance_limits",
    "error_variance_ratio",
    *_OF_CALIBRATION,
)


@dataclass(frozen=True)
class CalibrationError:
    """How well the calibration fitted its own samples.

    Parameters
    ----------
    standard_error : float, unit of the characteristic
        Standard error of calibration, SEC.
    samples, latent_variables : int
    """

    standard_error: float
    samples: int
    latent_variables: int

    def confidence_limit(self, degrees_of_freedom: int) -> float:
        """Return the largest standard error of prediction that the calibration itself explains.

        Parameters
        ----------
        degrees_of_freedom : int
            Of the standard error of prediction.

        Returns
        -------
        float, unit of the characteristic

        Notes
        -----
        ``UECL = SEC sqrt(F_0.95(n_val - 1, n_cal - p - 1))``, p the number of latent variables. Source: ISO
        12099:2017, unexplained error confidence limits (from memory).
        """
        freedom = self.samples - self.latent_variables - 1
        return self.standard_error * math.sqrt(f_quantile(1 - CONFIDENCE, degrees_of_freedom, freedom))

    def to_document(self, prediction: float, degrees_of_freedom: int) -> dict[str, Any]:
        """Return the test of a standard error of prediction as JSON-able members."""
        limit = self.confidence_limit(degrees_of_freedom)
        return {
            "standard_error_of_calibration": self.standard_error,
            "calibration_samples": self.samples,
            "latent_variables": self.latent_variables,
            "unexplained_error_confidence_limit": limit,
            "ratio_of_standard_errors": prediction / self.standard_error,
            "accepted": prediction <= limit,
        }


@dataclass(frozen=True)
class AgreementOptions:
    """The checked options of an agreement study.

    Parameters
    ----------
    presentations : int
        How often the analyzer's side of a pair was presented anew.
    tolerance_limits : tuple of float
        Limits near which the agreement is looked at by itself.
    error_variance_ratio : float or None
        Variance of the reference's errors over that of the analyzer's.
    calibration : CalibrationError or None
    """

    presentations: int
    tolerance_limits: tuple[float, ...]
    error_variance_ratio: float | None
    calibration: CalibrationError | None


def agreement_options(options: Mapping[str, Any]) -> AgreementOptions:
    """Check the options of an agreement study.

    Parameters
    ----------
    options : mapping

    Returns
    -------
    AgreementOptions

    Raises
    ------
    EvidenceError
        With all faults found; a study that does not say it is independent of the calibration is one.
    """
    faults: list[BudgetsError] = []
    if options.get("independent") is not True:
        faults.append(
            EvidenceError(
                "an agreement study must say that its samples are independent of the calibration "
                "(independent: true); errors of calibration or cross-validation samples are too small",
                where=("options", "independent"),
            )
        )
    presentations = options.get("presentations_per_pair", 1)
    if not _is_whole(presentations, 1):
        faults.append(_fault("presentations_per_pair", "a whole number from 1 up is expected"))
    limits = options.get("tolerance_limits", ())
    if not isinstance(limits, (list, tuple)) or not all(map(_is_finite, limits)):
        faults.append(_fault("tolerance_limits", "finite numbers are expected"))
    ratio = options.get("error_variance_ratio")
    if ratio is not None and not (_is_finite(ratio) and 1 / _LARGEST_RATIO <= ratio <= _LARGEST_RATIO):
        faults.append(
            _fault(
                "error_variance_ratio",
                "the variance of the reference's errors over that of the analyzer's is expected, a number "
                f"from {1 / _LARGEST_RATIO:g} to {_LARGEST_RATIO:g}",
            )
        )
    faults += _faults_of_calibration(options)
    raise_collected(faults)
    return AgreementOptions(
        presentations,
        tuple(float(limit) for limit in limits),
        None if ratio is None else float(ratio),
        _calibration(options),
    )


def _faults_of_calibration(options: Mapping[str, Any]) -> Sequence[BudgetsError]:
    given = [name for name in _OF_CALIBRATION if options.get(name) is not None]
    if not given:
        return ()
    faults = [
        _fault(name, f"is missing beside {', '.join(given)}: the test needs all of them")
        for name in _OF_CALIBRATION
        if name not in given
    ]
    error, samples, variables = (options.get(name) for name in _OF_CALIBRATION)
    if error is not None and not (_is_finite(error) and error > 0):
        faults.append(_fault(_OF_CALIBRATION[0], "a number above 0 is expected"))
    if samples is not None and not _is_whole(samples, 1):
        faults.append(_fault(_OF_CALIBRATION[1], "a whole number from 1 up is expected"))
    if variables is not None and not _is_whole(variables, 0):
        faults.append(_fault(_OF_CALIBRATION[2], "a whole number from 0 up is expected"))
    if not faults and _calibration_freedom(options) < 1:
        faults.append(
            _fault(_OF_CALIBRATION[1], "the calibration needs more samples than latent variables and one")
        )
    return faults


def _calibration_freedom(options: Mapping[str, Any]) -> int:
    return int(options["calibration_samples"]) - int(options["latent_variables"]) - 1


def _calibration(options: Mapping[str, Any]) -> CalibrationError | None:
    if options.get(_OF_CALIBRATION[0]) is None:
        return None
    error, samples, variables = (options[name] for name in _OF_CALIBRATION)
    return CalibrationError(float(error), samples, variables)


def _fault(name: str, message: str) -> EvidenceError:
    return EvidenceError(message, where=("options", name))


def _is_finite(value: object) -> bool:
    return isinstance(value, (int, float)) and not isinstance(value, bool) and math.isfinite(value)


def _is_whole(value: object, least: int) -> bool:
    return isinstance(value, int) and not isinstance(value, bool) and value >= least
