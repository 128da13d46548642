"""JCGM 106 and ILAC-G8: conformity."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

from budgets.conformity import Tolerance, conformance_probability, tails
from budgets.error_distributions import StudentT
from service.published.cases import Runner

NORMAL = StudentT(math.inf)

Inputs = Mapping[str, Any]


def _conformance(i: Inputs) -> dict[str, Any]:
    tolerance = Tolerance(i.get("TL"), i["TU"])
    return {"pc": conformance_probability(i["y"], i["u"], NORMAL, tolerance)}


def _false_acceptance(i: Inputs) -> dict[str, Any]:
    """One limit, the estimate at the acceptance limit, U = 2 u."""
    tolerance = Tolerance(None, 10.0)
    return {"pfa": [tails(10.0 - ratio * 2.0, 1.0, NORMAL, tolerance)[1] for ratio in i["w_over_U"]]}


JCGM_106: dict[str, Runner] = {"jcgm106-7.3.3-ex1": _conformance, "jcgm106-7.4": _conformance}
ILAC_G8: dict[str, Runner] = {"ilac-g8-table": _false_acceptance}
