"""What was read and judged of a lot before: the looks that counted, the readings that a further one joins.

Pure, from the entries of the lot's decisions. A look counts for a characteristic once an estimate from
readings that were not looked at before was compared with a limit. Readings of a decision that did not come so
far are not lost: they belong to the next look, so that nothing that was seen can be left out.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any, Final

from budgets.units import conversion
from service.documents import DecisionRequest, Reading
from service.errors import Fault, InvalidRequest
from service.schemas import load
from service.workflows.register import Register


@dataclass(frozen=True)
class Counted:
    """The looks that counted for a characteristic, and how many of its readings they judged."""

    looks: int
    readings: int


@dataclass(frozen=True)
class EarlierLooks:
    """The decisions on a lot so far, the first one first, as their entries say them."""

    identities: tuple[str, ...] = ()
    decisions: tuple[Mapping[str, Any], ...] = ()

    @property
    def round(self) -> int:
        """The number of the decision to be made."""
        return len(self.decisions) + 1

    @property
    def rounds_left(self) -> int:
        """How often the lot may be read again, as the last decision said."""
        return int(self.decisions[-1]["rounds_left"]) if self.decisions else 0

    def counted(self, characteristic: str) -> Counted:
        """Count the looks at a characteristic."""
        looks = readings = 0
        for verdicts in self._compared(characteristic):
            judged = max((verdict["readings"] for verdict in verdicts), default=0)
            if judged > readings:
                looks, readings = looks + 1, judged
        return Counted(looks, readings)

    def compared(self, specification: str, characteristic: str) -> list[Mapping[str, Any]]:
        """Give the verdicts by a specification in which an estimate was compared with its limits."""
        return [
            verdict
            for verdicts in self._compared(characteristic)
            for verdict in verdicts
            if verdict["specification"]["code"] == specification
        ]

    def specifications(self, register: Register, product: str) -> tuple[str, ...]:
        """Give the specifications that the lot is judged against: all earlier ones, and its product's own.

        Those of the product are left out where the line named others at first.
        """
        codes: dict[str, None] = {}
        for decision in self.decisions:
            for verdict in decision["verdicts"]:
                if verdict["specification"] is not None:
                    codes[verdict["specification"]["code"]] = None
        if self.decisions[0]["request"].get("specifications") is None:
            codes.update(dict.fromkeys(register.products[product].default_specifications))
        return tuple(codes)

    def joined(self, register: Register, request: DecisionRequest) -> DecisionRequest:
        """Join the readings of a request with all earlier ones, in the units of the characteristics.

        Raises
        ------
        InvalidRequest
            Readings of one of the calls are weighted.
        """
        if not self.decisions:
            return request
        requests = [load(DecisionRequest, decision["request"]) for decision in self.decisions]
        requests.append(request)
        if any(reading.weight is not None for each in requests for reading in each.readings):
            fault = Fault(
                "got readings with weights",
                "none: readings of several rounds are joined as the mean of sample means",
                "#/readings",
            )
            raise InvalidRequest("1 fault; nothing was recorded.", faults=(fault,))
        readings = tuple(reading for each in requests for reading in _converted(register, each))
        channels = {name for reading in readings for name in reading.values}
        units = {name: register.characteristics[request.product, name].unit for name in sorted(channels)}
        return replace(
            request,
            units=units,
            readings=readings,
            specifications=self.specifications(register, request.product),
        )

    def _compared(self, characteristic: str) -> list[list[Mapping[str, Any]]]:
        """Give the verdicts on a characteristic of every decision, as far as an estimate was compared."""
        return [
            [
                verdict
                for verdict in decision["verdicts"]
                if verdict["characteristic"] == characteristic
                and verdict["conformance_probability"] is not None
            ]
            for decision in self.decisions
        ]


def _converted(register: Register, request: DecisionRequest) -> Sequence[Reading]:
    converters = {
        name: conversion(unit, register.characteristics[request.product, name].unit)
        for name, unit in request.units.items()
    }
    return [
        replace(reading, values={name: converters[name](value) for name, value in reading.values.items()})
        for reading in request.readings
    ]


FIRST_LOOK: Final = EarlierLooks()
