"""Products, characteristics, lines, analyzers, calibrations and laboratories: put, read, list."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any, Final

from budgets.units import conversion
from service.access import require
from service.documents import (
    Actor,
    Analyzer,
    Calibration,
    Characteristic,
    Laboratory,
    Line,
    Product,
)
from service.errors import NotFound, PreconditionRequired, StaleVersion
from service.ledger import Entry
from service.schemas import dump
from service.store.rows import StoredDocument
from service.store.unit_of_work import UnitOfWork
from service.workflows.evidence import FaultCollector
from service.workflows.laboratories import check_laboratory
from service.workflows.paging import page_of, start_after
from service.workflows.recording import PLANT_CHAIN, Page, Request, entry_reference, record, was_recorded
from service.workflows.services import Services


@dataclass(frozen=True)
class MasterAnswer:
    """A master document as it stands, its revision, and whether this call made it."""

    document: dict[str, Any]
    revision: int
    created: bool = False
    earlier: bool = False
    entry: dict[str, Any] | None = None


@dataclass(frozen=True)
class MasterKind:
    """A kind of master data: its document, its key, and what it may refer to."""

    name: str
    document_class: type[Any]
    key: Callable[[Any], str]
    check: Callable[[UnitOfWork, Any, FaultCollector], None]


def put(
    services: Services,
    actor: Actor,
    kind: str,
    document: Any,
    *,
    if_match: int | None,
    request: Request,
) -> MasterAnswer:
    """Make or replace a master document; what already stands is answered with what stands.

    Raises
    ------
    PreconditionRequired, StaleVersion
        It exists, and If-Match is missing or names another revision.
    InvalidRequest
        It refers to something that does not exist.
    KeyReused
        The key was used for another request.
    """
    require(actor, "change master data")
    kind_of = KINDS[kind]
    key = kind_of.key(document)
    content = dump(document)
    with services.database.reading() as unit_of_work:
        stored = unit_of_work.master.get(kind, key)
        repeated = was_recorded(unit_of_work, actor, request)
    if not repeated and stored is not None and stored.document == content:
        return MasterAnswer(stored.document, stored.revision)

    def perform(unit_of_work: UnitOfWork) -> Entry:
        stored = unit_of_work.master.get(kind, key)
        _check_precondition(stored, if_match)
        collector = FaultCollector()
        kind_of.check(unit_of_work, document, collector)
        collector.finish("The document refers to what does not exist or does not fit.")
        revision = 1 if stored is None else stored.revision + 1
        particulars = {"key": key, "revision": revision, "document": content}
        entry = unit_of_work.append(PLANT_CHAIN, f"{kind}-put", actor.principal, particulars)
        unit_of_work.master.put(kind, key, content, entry)
        unit_of_work.bump_revision()
        return entry

    recorded = record(services, actor, request, {PLANT_CHAIN}, perform)
    written = recorded.entry.content
    return MasterAnswer(
        written["document"],
        written["revision"],
        created=written["revision"] == 1,
        earlier=recorded.earlier,
        entry=entry_reference(recorded.entry),
    )


def get(services: Services, actor: Actor, kind: str, key: str) -> MasterAnswer:
    """Read one master document. Raises NotFound."""
    require(actor, "read")
    with services.database.reading() as unit_of_work:
        stored = unit_of_work.master.get(kind, key)
    if stored is None:
        raise NotFound(f"There is no {kind} {key!r}.")
    return MasterAnswer(stored.document, stored.revision)


def listing(
    services: Services,
    actor: Actor,
    kind: str,
    *,
    prefix: str | None = None,
    limit: int = 50,
    cursor: str | None = None,
) -> Page:
    """List a kind, last changed first; ``prefix`` narrows characteristics to a product."""
    require(actor, "read")
    with services.database.reading() as unit_of_work:
        before = start_after(
            cursor,
            lambda key: unit_of_work.master.get(kind, key),
            lambda last: (last.sequence, last.key),
        )
        found = unit_of_work.master.list(kind, prefix=prefix, limit=limit + 1, before=before)
    return page_of(found, limit, lambda stored: stored.document, lambda stored: stored.key)


def _check_precondition(stored: StoredDocument | None, if_match: int | None) -> None:
    if stored is None:
        if if_match is not None:
            raise StaleVersion("If-Match names a revision, but there is no such document yet.")
        return
    if if_match is None:
        raise PreconditionRequired("Replacing this document needs If-Match with the ETag that was read.")
    if stored.revision != if_match:
        raise StaleVersion(
            f"The document stands at revision {stored.revision}, not {if_match}; read it again."
        )


# --- what each kind may refer to -----------------------------------------------------------------------


def _expect(
    unit_of_work: UnitOfWork, collector: FaultCollector, kind: str, key: str, pointer: str
) -> StoredDocument | None:
    found = unit_of_work.master.get(kind, key)
    if found is None:
        collector.add(pointer, f"there is no {kind} {key!r}", f"the code of a {kind} that exists")
    return found


def _check_product(unit_of_work: UnitOfWork, product: Product, collector: FaultCollector) -> None:
    owners = unit_of_work.versions.products("specification")
    for index, code in enumerate(product.default_specifications):
        owner = owners.get(code)
        if owner is not None and owner != product.code:
            collector.add(
                f"#/default_specifications/{index}", f"{code!r} belongs to {owner!r}", "one of this product"
            )


def _check_characteristic(
    unit_of_work: UnitOfWork, characteristic: Characteristic, collector: FaultCollector
) -> None:
    _expect(unit_of_work, collector, "product", characteristic.product, "#/product")
    for index, unit in enumerate(characteristic.accepted_units):
        collector.attempt(f"#/accepted_units/{index}", conversion, unit, characteristic.unit)
    if characteristic.unit not in characteristic.accepted_units:
        collector.add(
            "#/accepted_units", "the unit itself is missing", f"a list with {characteristic.unit!r}"
        )
    for index, code in enumerate(characteristic.derived_from or ()):
        pointer = f"#/derived_from/{index}"
        key = f"{characteristic.product}/{code}"
        source = _expect(unit_of_work, collector, "characteristic", key, pointer)
        if source is not None and source.document["derived_from"]:
            collector.add(pointer, f"{code!r} is derived itself", "a characteristic that is read directly")
    before = unit_of_work.master.get("characteristic", f"{characteristic.product}/{characteristic.code}")
    if before is not None and before.document["unit"] != characteristic.unit:
        # Budgets, specifications and the record speak in this unit.
        collector.add(
            "#/unit", f"got {characteristic.unit!r}", f"{before.document['unit']!r}; the unit stays"
        )
    if before is not None and _has_budget_in_force(unit_of_work, characteristic):
        # Rules were compiled, and will be, with these: they change with a budget, not under it.
        now = dump(characteristic)
        for member in ("natural_domain", "derived_from"):
            if before.document[member] != now[member]:
                expected = f"{before.document[member]}, as long as a budget is in force"
                collector.add(f"#/{member}", f"got {now[member]}", expected)
    lower, upper = characteristic.natural_domain.lower, characteristic.natural_domain.upper
    if lower is not None and upper is not None and lower >= upper:
        collector.add("#/natural_domain", f"got {lower} to {upper}", "a lower bound below the upper one")


def _has_budget_in_force(unit_of_work: UnitOfWork, characteristic: Characteristic) -> bool:
    subject = (characteristic.product, characteristic.code)
    return any(
        (version.product, version.characteristic) == subject
        for version in unit_of_work.versions.all_in_force("budget")
    )


def _check_line(unit_of_work: UnitOfWork, line: Line, collector: FaultCollector) -> None:
    for index, analyzer in enumerate(line.analyzers):
        _expect(unit_of_work, collector, "analyzer", analyzer, f"#/analyzers/{index}")
    if line.code == PLANT_CHAIN:
        collector.add("#/code", f"{PLANT_CHAIN!r} names the plant's own chain of entries", "another code")


def _check_analyzer(unit_of_work: UnitOfWork, analyzer: Analyzer, collector: FaultCollector) -> None:
    for channel in analyzer.decimals:
        if channel not in analyzer.channels:
            collector.add(f"#/decimals/{channel}", "is no channel of this analyzer", "one of its channels")


def _check_calibration(unit_of_work: UnitOfWork, calibration: Calibration, collector: FaultCollector) -> None:
    _expect(unit_of_work, collector, "product", calibration.product, "#/product")
    analyzer = _expect(unit_of_work, collector, "analyzer", calibration.analyzer, "#/analyzer")
    before = unit_of_work.master.get("calibration", calibration.code)
    if before is not None and before.document["analyzer"] != calibration.analyzer:
        collector.add("#/code", f"{calibration.code!r} belongs to another analyzer", "a code never used")
    if before is not None:
        # Budgets in force rest on evidence for this very model and adjustment.
        now = dump(calibration)
        for member in ("product", "adjustment"):
            if before.document[member] != now[member]:
                collector.add(
                    f"#/{member}",
                    f"differs from what {calibration.code!r} has",
                    "the same; another model or adjustment is another calibration with a code of its own",
                )
    if analyzer is None:
        return
    for member in ("latent_variables", "standard_error_of_calibration", "adjustment"):
        for channel in getattr(calibration, member):
            if channel not in analyzer.document["channels"]:
                collector.add(f"#/{member}/{channel}", "is no channel of the analyzer", "one of its channels")


KINDS: Final[Mapping[str, MasterKind]] = {
    kind.name: kind
    for kind in (
        MasterKind("product", Product, lambda item: item.code, _check_product),
        MasterKind(
            "characteristic",
            Characteristic,
            lambda item: f"{item.product}/{item.code}",
            _check_characteristic,
        ),
        MasterKind("line", Line, lambda item: item.code, _check_line),
        MasterKind("analyzer", Analyzer, lambda item: item.code, _check_analyzer),
        MasterKind("calibration", Calibration, lambda item: item.code, _check_calibration),
        MasterKind("laboratory", Laboratory, lambda item: item.code, check_laboratory),
    )
}
