"""What workflows work with, put together once by create_app or a command."""

from __future__ import annotations

from dataclasses import dataclass, field

from service.settings import Settings
from service.store.unit_of_work import Database
from service.store.writer import Writer
from service.workflows.register import RegisterCache


@dataclass(frozen=True)
class Services:
    """The database, its one writer, and the register of what is in force."""

    settings: Settings
    database: Database
    writer: Writer
    registers: RegisterCache = field(default_factory=RegisterCache)

    def close(self) -> None:
        """Let the writer finish what it took, then let go of the database."""
        self.writer.close()
        self.database.close()
