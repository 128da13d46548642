"""Repository of master documents: products, characteristics, lines, analyzers, calibrations, laboratories."""

from __future__ import annotations

from typing import Any

from sqlalchemy import Row, select, tuple_

from service.ledger import Entry
from service.store.rows import Document, StoredDocument, read_document, write_document
from service.store.session import Session
from service.store.tables import master_documents


def _stored(row: Row[Any]) -> StoredDocument:
    return StoredDocument(
        row.kind, row.key, row.revision, read_document(row.document), row.chain, row.sequence
    )


class Master:
    """Master documents by kind and key; a characteristic's key is ``product/code``."""

    def __init__(self, session: Session) -> None:
        self._session = session

    def get(self, kind: str, key: str) -> StoredDocument | None:
        """Return a document as it stands."""
        table = master_documents
        row = self._session.row(select(table).where(table.c.kind == kind, table.c.key == key), table)
        return None if row is None else _stored(row)

    def all(self, kind: str) -> list[StoredDocument]:
        """Return all documents of a kind by key."""
        query = select(master_documents).where(master_documents.c.kind == kind)
        return [_stored(row) for row in self._session.rows(query.order_by(master_documents.c.key))]

    def list(
        self,
        kind: str,
        *,
        prefix: str | None = None,
        limit: int = 500,
        before: tuple[int, str] | None = None,
    ) -> list[StoredDocument]:
        """Return documents, last changed first; ``before`` is (sequence, key) of the last one of a page."""
        table = master_documents
        query = select(table).where(table.c.kind == kind)
        if prefix is not None:
            query = query.where(table.c.key.startswith(prefix, autoescape=True))
        if before is not None:
            query = query.where(tuple_(table.c.sequence, table.c.key) < before)
        query = query.order_by(table.c.sequence.desc(), table.c.key.desc()).limit(limit)
        return [_stored(row) for row in self._session.rows(query, master_documents)]

    def put(self, kind: str, key: str, document: Document, entry: Entry) -> StoredDocument:
        """Create a document or replace it; its revision counts up."""
        before = self.get(kind, key)
        values = {
            "kind": kind,
            "key": key,
            "revision": 1 if before is None else before.revision + 1,
            "document": write_document(document),
            "chain": entry.chain,
            "sequence": entry.sequence,
        }
        self._session.upsert(master_documents, values)
        return StoredDocument(**{**values, "document": dict(document)})  # type: ignore[arg-type]
