"""The record as a whole: whether it is unaltered and complete."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import replace
from typing import Any

from service.access import require
from service.documents import Actor
from service.ledger import Anchor
from service.store.unit_of_work import Database
from service.store.verification import Verification, verify
from service.workflows.projections import finding_of
from service.workflows.services import Services


def verify_record(database: Database, anchors: Iterable[Anchor] = ()) -> Verification:
    """Check every entry, then every table that decisions are made from against the entries."""
    result = verify(database, anchors)
    if not result.whole:
        return result
    with database.reading() as unit_of_work:
        return replace(result, finding=finding_of(unit_of_work))


def verification(services: Services, actor: Actor) -> dict[str, Any]:
    """Verify the record; gives the heads of the chains and the first finding, if any."""
    require(actor, "verify the record")
    result = verify_record(services.database)
    return {
        "whole": result.whole,
        "chains": [
            {"chain": chain.chain, "entries": chain.entries, "hash": chain.hash} for chain in result.chains
        ],
        "finding": None if result.finding is None else str(result.finding),
    }
