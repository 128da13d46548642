"""The tree of errors of the computation. It knows no HTTP and no fields of any form.

BudgetsError
├── ModelError            the measurement model or an estimate does not fit it
├── ComponentError        a component, or a set of components, cannot stand in a budget
│   └── ProcedureError    what was done is not what the procedure planned
├── CorrelationError      a correlation between components is not possible
├── LimitsError           tolerance limits or decision rule cannot be used
│   └── EmptyAcceptanceError   no estimate at all could be accepted
├── ConvergenceError      a numerical search did not end
├── EvidenceError         study data cannot be evaluated as they were asked to be
├── UnitsError            a unit is unknown or two units do not convert
└── NotSupportedError     right as such, but this version does not do it yet

Faults of an argument are ValueErrors too, so that a caller who knows only Python still catches them.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Self

Path = tuple[str | int, ...]

LARGEST_NUMBER_OF_FAULTS = 20


class BudgetsError(Exception):
    """Base of all errors of the computation.

    Parameters
    ----------
    message : str
        What is wrong, in words that a user can act on.
    where : tuple of str or int
        Path of the thing at fault inside the object given, e.g. ``("components", 2, "level")``.
    faults : sequence of BudgetsError
        The single faults, where several were found at once (at most 20 are kept).
    """

    def __init__(self, message: str, *, where: Path = (), faults: Sequence[BudgetsError] = ()) -> None:
        super().__init__(message)
        self.message = message
        self.where = where
        self.faults = tuple(faults[:LARGEST_NUMBER_OF_FAULTS])

    def under(self, *prefix: str | int) -> Self:
        """Put the path of every fault below ``prefix`` and return the error itself."""
        self.where = prefix + self.where
        for fault in self.faults:
            fault.under(*prefix)
        return self

    def each(self) -> tuple[BudgetsError, ...]:
        """Return the single faults: those collected, or the error itself when it is the only one."""
        return self.faults or (self,)


class ModelError(BudgetsError, ValueError):
    """The measurement model, or an estimate given to it, cannot be used."""


class ComponentError(BudgetsError, ValueError):
    """A component cannot stand in this budget."""


class ProcedureError(ComponentError):
    """What was done is outside of what the procedure planned."""


class CorrelationError(BudgetsError, ValueError):
    """A correlation between components is impossible."""


class LimitsError(BudgetsError, ValueError):
    """The tolerance limits or the decision rule cannot be used."""


class EmptyAcceptanceError(LimitsError):
    """No estimate could be accepted: this measurement cannot prove this specification.

    Parameters
    ----------
    message : str
        The reason.
    capability_index : float or None
        Measurement capability index; None when there is one limit only.
    remedy : str
        What would open the acceptance interval.
    where : tuple of str or int
        Path of the thing at fault.
    """

    def __init__(
        self, message: str, *, capability_index: float | None, remedy: str, where: Path = ()
    ) -> None:
        super().__init__(message, where=where)
        self.capability_index = capability_index
        self.remedy = remedy


class ConvergenceError(BudgetsError, ArithmeticError):
    """A numerical search did not end within its bounds."""


class EvidenceError(BudgetsError, ValueError):
    """Study data, or what was asked of them, cannot be evaluated."""


class UnitsError(BudgetsError, ValueError):
    """A unit is unknown, or two units cannot be converted into each other."""


class NotSupportedError(BudgetsError, ValueError):
    """Valid as such, but not supported yet."""

    def __init__(self, message: str, *, where: Path = (), faults: Sequence[BudgetsError] = ()) -> None:
        prefix = "not supported yet: "
        text = message if message.startswith(prefix) else prefix + message
        super().__init__(text, where=where, faults=faults)


def raise_collected(faults: Sequence[BudgetsError]) -> None:
    """Raise what was collected: nothing, the single fault, or one error that carries them all.

    Parameters
    ----------
    faults : sequence of BudgetsError
        Faults found, in the order in which they are to be read.

    Raises
    ------
    BudgetsError
        The single fault itself, or an error of the class of the first one with all in ``faults``.
    """
    if not faults:
        return
    if len(faults) == 1:
        raise faults[0]
    first = faults[0]
    # NotSupportedError or a plain error: both take a message and the list of faults.
    base = type(first) if not isinstance(first, EmptyAcceptanceError) else LimitsError
    raise base(f"{len(faults)} faults, the first: {first.message}", faults=faults)
