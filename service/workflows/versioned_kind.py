"""What distinguishes one kind of versioned document from another."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

from service.errors import Fault, InvalidRequest
from service.store.rows import StoredVersion
from service.store.unit_of_work import UnitOfWork
from service.workflows.budget_validation import Findings
from service.workflows.rules import RuleKey


@dataclass(frozen=True)
class Approval:
    """What is computed once, at approval, and stored: later decisions rest on it."""

    evaluation: dict[str, Any] | None = None
    lapses_at: str | None = None
    rules: tuple[tuple[RuleKey, dict[str, Any]], ...] = ()

    def rules_document(self) -> list[dict[str, Any]]:
        """Write the compiled rules down for the record."""
        return [{**key.to_document(), "numbers": numbers} for key, numbers in self.rules]


@dataclass(frozen=True)
class VersionedKind:
    """A kind of versioned document.

    ``check`` refuses a draft that names what does not exist; ``approval`` computes what is stored at
    approval, with what the helper process found for budgets before; ``subject`` gives (product,
    characteristic) for look-up. A singleton has one code, its name.
    """

    name: str
    document_class: type[Any]
    subject: Callable[[Any], tuple[str | None, str | None]]
    check: Callable[[UnitOfWork, Any], None]
    approval: Callable[[UnitOfWork, StoredVersion, Any, Findings], Approval]
    singleton: bool = False

    def check_code(self, document: Any, code: str) -> None:
        """Refuse a document that names another code than the path. Raises InvalidRequest."""
        if not self.singleton and document.code != code:
            raise InvalidRequest(
                "The document belongs to another code.",
                faults=(
                    Fault(
                        f"got {document.code!r}", expected=f"{code!r}, the code in the path", pointer="#/code"
                    ),
                ),
            )
