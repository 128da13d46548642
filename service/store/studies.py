"""Repository of studies with their evaluations."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from contextlib import contextmanager
from typing import Any

from sqlalchemy import Row, select, tuple_

from service.ledger import Entry
from service.store.rows import Document, StoredStudy, read_document, write_document
from service.store.session import Session
from service.store.tables import studies


def _stored(row: Row[Any]) -> StoredStudy:
    documents = {"document": read_document(row.document), "evaluation": read_document(row.evaluation)}
    return StoredStudy(**{**row._mapping, **documents})


class Studies:
    """Studies by code; kept once, never changed."""

    def __init__(self, session: Session) -> None:
        self._session = session
        self._expected: dict[str, StoredStudy] = {}

    @contextmanager
    def expecting(self, coming: Iterable[StoredStudy]) -> Iterator[None]:
        """Within the block let ``get`` find studies that the act at hand is going to add."""
        self._expected = {study.code: study for study in coming}
        try:
            yield
        finally:
            self._expected = {}

    def get(self, code: str) -> StoredStudy | None:
        """Return a study."""
        if code in self._expected:
            return self._expected[code]
        row = self._session.row(select(studies).where(studies.c.code == code), studies)
        return None if row is None else _stored(row)

    def add(
        self,
        code: str,
        document: Document,
        evaluation: Document,
        entry: Entry,
        *,
        product: str,
        characteristic: str,
        design: str,
    ) -> StoredStudy:
        """Keep a study and its evaluation."""
        values = {
            "code": code,
            "product": product,
            "characteristic": characteristic,
            "design": design,
            "document": write_document(document),
            "evaluation": write_document(evaluation),
            "chain": entry.chain,
            "sequence": entry.sequence,
        }
        self._session.insert(studies, values)
        read = {"document": dict(document), "evaluation": dict(evaluation)}
        return StoredStudy(**{**values, **read})  # type: ignore[arg-type]

    def all(self) -> list[StoredStudy]:
        """Return all studies by code."""
        rows = self._session.rows(select(studies).order_by(studies.c.code), studies)
        return [_stored(row) for row in rows]

    def list(
        self,
        *,
        product: str | None = None,
        characteristic: str | None = None,
        design: str | None = None,
        limit: int = 500,
        before: tuple[int, str] | None = None,
    ) -> list[StoredStudy]:
        """Return studies, newest first; ``before`` is (sequence, code) of the last one of a page."""
        query = select(studies)
        wanted = {"product": product, "characteristic": characteristic, "design": design}
        for name, value in wanted.items():
            if value is not None:
                query = query.where(studies.c[name] == value)
        if before is not None:
            query = query.where(tuple_(studies.c.sequence, studies.c.code) < before)
        query = query.order_by(studies.c.sequence.desc(), studies.c.code.desc()).limit(limit)
        return [_stored(row) for row in self._session.rows(query, studies)]
