"""The tree of errors that workflows and store raise. It knows no HTTP: service/api/problems.py maps it.

ServiceError
├── Unreadable          the request could not be read at all
├── InvalidRequest      readable, but something in it is wrong
│   ├── NotSupported    a form of contracts that this version does not build yet
│   ├── KeyMissing      a recording call without an idempotency key
│   └── KeyReused       the key was used with another body
├── TooLarge
├── Unauthenticated
├── Forbidden
├── NotFound
├── Conflict            what is there does not allow it (``code`` says which conflict)
├── StaleVersion        If-Match names another revision than the one that stands
├── PreconditionRequired
├── Unavailable         no answer within the deadline; the same key finds the truth later
└── SetupError          for the command line
    ├── SettingsError
    ├── SchemaMismatch
    └── LockHeld
"""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class Fault:
    """One thing that is wrong with a request: where, what was got and what is expected.

    ``supported`` is False for what is valid as such, but which this version cannot do yet.
    """

    detail: str
    expected: str | None = None
    pointer: str | None = None
    parameter: str | None = None
    header: str | None = None
    supported: bool = True


class ServiceError(Exception):
    """Base of all errors of the service; carries a message and the single faults."""

    def __init__(self, message: str, *, faults: tuple[Fault, ...] = (), link: str | None = None) -> None:
        super().__init__(message)
        self.message = message
        self.faults = faults
        self.link = link


class Unreadable(ServiceError):
    """The request is no JSON text of the permitted form."""


class InvalidRequest(ServiceError):
    """The request was read, but does not fit its description or the mathematics."""


class NotSupported(InvalidRequest):
    """The request says something valid that this version cannot do yet."""


class KeyMissing(InvalidRequest):
    """A recording call came without a usable idempotency key."""


class KeyReused(InvalidRequest):
    """The idempotency key was used before with another method, path or body."""


class TooLarge(ServiceError):
    """The request is larger than this version takes."""


class Unauthenticated(ServiceError):
    """No credentials, or credentials that are not known (any more)."""


class Forbidden(ServiceError):
    """The principal is known but may not do this."""


class NotFound(ServiceError):
    """No such thing."""


class Conflict(ServiceError):
    """The present state does not allow it; ``code`` is the slug of the conflict."""

    def __init__(
        self, code: str, message: str, *, faults: tuple[Fault, ...] = (), link: str | None = None
    ) -> None:
        super().__init__(message, faults=faults, link=link)
        self.code = code


class StaleVersion(ServiceError):
    """The document was changed since the caller read it."""


class PreconditionRequired(ServiceError):
    """A replacement needs If-Match."""


class Unavailable(ServiceError):
    """The service could not answer in time; whether it was recorded is found by the same key."""

    def __init__(self, message: str, *, retry_after: int = 1) -> None:
        super().__init__(message)
        self.retry_after = retry_after


class SetupError(ServiceError):
    """The service cannot start or a command cannot run as it is set up."""


class SettingsError(SetupError):
    """A setting is unknown or unusable."""


class SchemaMismatch(SetupError):
    """The database has another schema than this program."""


class LockHeld(SetupError):
    """Another serving process holds the database file."""
