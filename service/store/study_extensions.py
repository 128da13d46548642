"""Repository of extensions: studies that an approver let serve longer, each once."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from typing import Any

from sqlalchemy import Row, select

from service.ledger import Entry
from service.store.rows import Document, StoredExtension, read_document, write_document
from service.store.session import Session
from service.store.tables import study_extensions


def _stored(row: Row[Any]) -> StoredExtension:
    return StoredExtension(**{**row._mapping, "document": read_document(row.document)})


class StudyExtensions:
    """Extensions by the code of the study; kept once, never changed."""

    def __init__(self, session: Session) -> None:
        self._session = session
        self._expected: Mapping[str, Document] = {}

    @contextmanager
    def expecting(self, coming: Mapping[str, Document]) -> Iterator[None]:
        """Within the block let ``document_of`` find extensions that the act at hand is going to add."""
        self._expected = coming
        try:
            yield
        finally:
            self._expected = {}

    def document_of(self, study: str) -> Document | None:
        """Return what was said of a study when it was extended."""
        if study in self._expected:
            return self._expected[study]
        stored = self.get(study)
        return None if stored is None else stored.document

    def get(self, study: str) -> StoredExtension | None:
        """Return the extension of a study."""
        query = select(study_extensions).where(study_extensions.c.study == study)
        row = self._session.row(query, study_extensions)
        return None if row is None else _stored(row)

    def add(self, study: str, document: Document, entry: Entry) -> None:
        """Keep the extension of a study."""
        values = {
            "study": study,
            "document": write_document(document),
            "chain": entry.chain,
            "sequence": entry.sequence,
        }
        self._session.insert(study_extensions, values)

    def all(self) -> list[StoredExtension]:
        """Return all extensions by the code of their study."""
        query = select(study_extensions).order_by(study_extensions.c.study)
        return [_stored(row) for row in self._session.rows(query, study_extensions)]
