"""The record as a whole: whether it is unaltered and complete."""

from __future__ import annotations

from typing import Any

from service.access import require
from service.documents import Actor
from service.store.verification import verify
from service.workflows.services import Services


def verification(services: Services, actor: Actor) -> dict[str, Any]:
    """Read every entry and check it; gives the heads of the chains and the first finding, if any."""
    require(actor, "verify the record")
    result = verify(services.database)
    return {
        "whole": result.finding is None,
        "chains": [
            {"chain": chain.chain, "entries": chain.entries, "hash": chain.hash} for chain in result.chains
        ],
        "finding": None if result.finding is None else str(result.finding),
    }
