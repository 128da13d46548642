"""What workflows work with, put together once by create_app or a command."""

from __future__ import annotations

from dataclasses import dataclass, field

from service.helpers import Helper
from service.settings import Settings
from service.store.unit_of_work import Database
from service.store.writer import Writer
from service.workflows.budget_validation import ValidationCache
from service.workflows.recorded_lots import Remembered
from service.workflows.register import RegisterCache


@dataclass(frozen=True)
class Services:
    """The database, its one writer, what is in force, the process that evaluates, what decisions said."""

    settings: Settings
    database: Database
    writer: Writer
    registers: RegisterCache = field(default_factory=RegisterCache)
    helper: Helper = field(default_factory=Helper)
    remembered: Remembered = field(default_factory=Remembered)
    validations: ValidationCache = field(default_factory=ValidationCache)

    def close(self) -> None:
        """End the helper, let the writer finish what it took, then let go of the database."""
        self.helper.close()
        self.writer.close()
        self.database.close()
