"""What Monte Carlo runs found for a budget: kept by the budget's digest, written down, and read again.

The runs are made before the writer has its turn, see `service.workflows.monte_carlo`. By the digest the
writer sees that what was found is about the very budget that it approves.
"""

from __future__ import annotations

import threading
from collections import OrderedDict
from collections.abc import Callable, Mapping
from typing import Any, Final

import numpy as np

from budgets.budget_validation import BudgetValidation, ErrorTables
from budgets.errors import BudgetsError
from budgets.propagation_validation import PropagationValidation
from service.errors import Unavailable

Answer = dict[str, Any]
Findings = Mapping[str, BudgetValidation | BudgetsError]
"""By the digest of a budget: what was found, or why it is refused."""

_MOST_KEPT: Final = 64


class ValidationCache:
    """Keeps what was found for the last budgets: a version is submitted before it is approved."""

    def __init__(self) -> None:
        self._lock = threading.Lock()
        self._found: OrderedDict[str, BudgetValidation | BudgetsError] = OrderedDict()

    def get(
        self, digest: str, find: Callable[[], BudgetValidation | BudgetsError]
    ) -> BudgetValidation | BudgetsError:
        """Give what is kept, or find it."""
        with self._lock:
            if digest in self._found:
                self._found.move_to_end(digest)
                return self._found[digest]
        found = find()
        with self._lock:
            self._found[digest] = found
            if len(self._found) > _MOST_KEPT:
                self._found.popitem(last=False)
        return found


def finding(found: Findings, digest: str) -> BudgetValidation:
    """Give what was found for the budget with this digest.

    Raises the error of the computation that refuses the budget, or Unavailable if it is another one by now.
    """
    if digest not in found:
        raise Unavailable("What the budget rests on changed meanwhile; nothing was recorded, try again.")
    result = found[digest]
    if isinstance(result, BudgetsError):
        raise result
    return result


def finding_document(found: BudgetValidation) -> Answer:
    """Write down what was found, for the record."""
    return {
        "agrees": found.agrees,
        "sentence": found.sentence,
        "seed": found.seed,
        "program": {"numpy": np.__version__},
        "checks": [
            {
                "readings_per_sample": list(place.counts.readings_per_sample),
                "at": dict(place.estimates),
                **validation_document(place.validation),
            }
            for place in found.places
        ],
        "tables": None if found.tables is None else found.tables.to_document(),
    }


def validation_document(found: PropagationValidation) -> Answer:
    """Write down the law of propagation beside one Monte Carlo run."""
    run = found.run
    return {
        "agrees": found.agrees,
        "sentence": found.sentence,
        "coverage_probability": run.coverage_probability,
        "law_of_propagation": {
            "estimate": found.estimate,
            "combined_standard_uncertainty": found.standard_uncertainty,
            "expanded_uncertainty": found.expanded_uncertainty,
            "coverage_interval": list(found.interval),
        },
        "monte_carlo": {
            "trials": run.trials,
            "tolerance": run.tolerance,
            "holds_tolerance": run.holds_tolerance,
            "mean": run.mean,
            "standard_deviation": run.standard_deviation,
            "median": run.median,
            "coverage_interval": list(run.symmetric),
            "shortest_coverage_interval": list(run.shortest),
            "scatter_of_ends": None if run.scatter is None else [run.scatter.lower, run.scatter.upper],
        },
        "differences": [found.difference_low, found.difference_high],
        "tolerance": found.tolerance,
        "with_known_variances": None
        if found.shape is None
        else {
            "agrees": found.shape.agrees,
            "differences": [found.shape.difference_low, found.shape.difference_high],
            "tolerance": found.shape.tolerance,
        },
        "remarks": list(run.remarks),
    }


def stored_tables(evaluation: Mapping[str, Any]) -> ErrorTables | None:
    """Give the tables that decisions use in the place of the law of propagation; None where it holds.

    Versions approved before there was such a check have none.
    """
    found = evaluation.get("monte_carlo")
    tables = None if found is None else found["tables"]
    return None if tables is None else ErrorTables.from_document(tables)


def shown(evaluation: Mapping[str, Any]) -> Answer | None:
    """Give what was found as a page shows it: without the tables, but saying what decisions use."""
    found = evaluation.get("monte_carlo")
    if found is None:
        return None
    plain = {name: member for name, member in found.items() if name != "tables"}
    used = "law_of_propagation" if found["tables"] is None else "monte_carlo"
    return {**plain, "decisions_use": used}
