"""The pure rules of the hash-chained record: the exact bytes of an entry and what makes a chain whole.

An entry is UTF-8 JSON text written once; its hash is the SHA-256 of those bytes, and the next entry of
the chain names that hash as ``previous``. Nothing here knows where entries are kept.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from datetime import UTC, datetime
from functools import cached_property
from typing import Any

FORMAT = 1
GENESIS = "0" * 64
"""What the first entry of a chain names as its predecessor."""

MEMBERS = ("format", "chain", "sequence", "previous", "recorded_at", "actor", "kind", "content")
_WRITER = json.JSONEncoder(ensure_ascii=False, allow_nan=False, separators=(",", ":"))


class EntryError(ValueError):
    """Bytes that are no entry, or content that cannot become one."""


@dataclass(frozen=True)
class Entry:
    """One entry of a chain; everything but the hash is said by ``body``."""

    chain: str
    sequence: int
    previous: str
    recorded_at: str
    actor: str
    kind: str
    body: bytes
    hash: str

    @cached_property
    def content(self) -> dict[str, Any]:
        """What was recorded, always read from the bytes, so that a first answer and a replay are equal."""
        content: dict[str, Any] = json.loads(self.body)["content"]
        return content

    @property
    def identity(self) -> str:
        """The name of the entry, as in ``tower-1.18233``."""
        return f"{self.chain}.{self.sequence}"


@dataclass(frozen=True)
class Head:
    """The last entry of a chain."""

    chain: str
    sequence: int
    hash: str
    recorded_at: str


@dataclass(frozen=True)
class Anchor:
    """A (chain, sequence, hash) kept outside the database."""

    chain: str
    sequence: int
    hash: str


@dataclass(frozen=True)
class StoredEntry:
    """An entry as a table holds it: the bytes and the columns that copy members of them."""

    chain: str
    sequence: int
    recorded_at: str
    actor: str
    kind: str
    previous: str
    hash: str
    body: bytes


@dataclass(frozen=True)
class Finding:
    """The first thing that is wrong with a record."""

    chain: str
    sequence: int | None
    detail: str

    def __str__(self) -> str:
        where = self.chain if self.sequence is None else f"{self.chain}.{self.sequence}"
        return f"{where}: {self.detail}"


def format_instant(instant: datetime) -> str:
    """Return the instant as RFC 3339 text in UTC with microseconds; such texts sort as the instants do."""
    if instant.tzinfo is None:
        raise ValueError("an instant needs a time zone")
    return instant.astimezone(UTC).isoformat(timespec="microseconds").replace("+00:00", "Z")


def read_instant(text: str) -> datetime:
    """Read an instant that format_instant wrote."""
    return datetime.fromisoformat(text)


def write_entry(
    *,
    chain: str,
    sequence: int,
    previous: str,
    recorded_at: str,
    actor: str,
    kind: str,
    content: Mapping[str, Any],
) -> Entry:
    """Write the entry's bytes and take their hash; refuses what has no exact JSON text."""
    members = (FORMAT, chain, sequence, previous, recorded_at, actor, kind, content)
    try:
        body = _WRITER.encode(dict(zip(MEMBERS, members, strict=True))).encode("utf-8")
    except (ValueError, TypeError) as error:  # NaN, a lone surrogate, an object that is no JSON value
        raise EntryError(f"the content cannot be recorded: {error}") from error
    return Entry(chain, sequence, previous, recorded_at, actor, kind, body, hash_of(body))


def hash_of(body: bytes) -> str:
    """Return the hash of an entry's bytes, as ``sha256sum`` prints it."""
    return hashlib.sha256(body).hexdigest()


def _members_once(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    members = dict(pairs)
    if len(members) != len(pairs):
        raise EntryError("a member stands twice")
    return members


def read_entry(body: bytes) -> Entry:
    """Read an entry back from its bytes."""
    try:
        members = json.loads(body.decode("utf-8"), object_pairs_hook=_members_once)
    except EntryError:
        raise
    except (ValueError, RecursionError) as error:
        raise EntryError(f"not JSON text: {error}") from error
    if not isinstance(members, dict) or tuple(members) != MEMBERS:
        raise EntryError("the members are not those of an entry")
    if members["format"] != FORMAT:
        raise EntryError(f"format {members['format']!r} is not known")
    texts = ("chain", "previous", "recorded_at", "actor", "kind")
    if not all(isinstance(members[name], str) for name in texts):
        raise EntryError("a member has the wrong type")
    if type(members["sequence"]) is not int or not isinstance(members["content"], dict):
        raise EntryError("a member has the wrong type")
    return Entry(
        chain=members["chain"],
        sequence=members["sequence"],
        previous=members["previous"],
        recorded_at=members["recorded_at"],
        actor=members["actor"],
        kind=members["kind"],
        body=body,
        hash=hash_of(body),
    )


class ChainCheck:
    """Checks one chain, entry by entry, in constant memory."""

    def __init__(self, chain: str, anchors: Iterable[Anchor] = ()) -> None:
        self.chain = chain
        self.sequence = 0
        self.hash = GENESIS
        self.recorded_at = ""
        self._anchors: dict[int, str] = {}
        self._contradiction: int | None = None
        for anchor in anchors:
            if anchor.chain != chain:
                continue
            if self._anchors.setdefault(anchor.sequence, anchor.hash) != anchor.hash:
                self._contradiction = anchor.sequence

    def add(self, stored: StoredEntry) -> Finding | None:
        """Check the next entry; a finding ends the check."""
        try:
            detail = self._fault(stored)
        except TypeError:  # SQLite keeps whatever somebody put into a column
            detail = "a column holds another type than was written"
        if detail is not None:
            return Finding(self.chain, self.sequence + 1, detail)
        self.sequence, self.hash, self.recorded_at = stored.sequence, stored.hash, stored.recorded_at
        return None

    def close(self, head: Head | None) -> Finding | None:
        """Compare the end of the chain with its head and with anchors beyond the end."""
        if self._contradiction is not None:
            return Finding(self.chain, self._contradiction, "the anchors contradict each other")
        beyond = [sequence for sequence in self._anchors if not 1 <= sequence <= self.sequence]
        if beyond:
            detail = f"an anchor names this entry, but the chain ends at {self.sequence}"
            return Finding(self.chain, min(beyond), detail)
        if head is None:
            return Finding(self.chain, None, "the chain has no head") if self.sequence else None
        if (head.sequence, head.hash) != (self.sequence, self.hash):
            detail = f"the head names entry {head.sequence} ({head.hash:.12}...), "
            detail += f"but the chain ends at {self.sequence} ({self.hash:.12}...)"
            return Finding(self.chain, self.sequence, detail)
        if self.sequence and head.recorded_at != self.recorded_at:
            return Finding(self.chain, self.sequence, "the head has another recorded_at than its entry")
        return None

    def _fault(self, stored: StoredEntry) -> str | None:
        expected = self.sequence + 1
        if stored.sequence != expected:
            return f"entry {expected} is missing" if stored.sequence > expected else "the sequence goes back"
        if hash_of(stored.body) != stored.hash:
            return "the hash is not that of the entry's bytes"
        try:
            entry = read_entry(stored.body)
        except EntryError as error:
            return f"the bytes are no entry: {error}"
        for name in ("chain", "sequence", "previous", "recorded_at", "actor", "kind"):
            if getattr(stored, name) != getattr(entry, name):
                return f"the column {name} differs from the entry's bytes"
        if entry.chain != self.chain:
            return f"the entry belongs to the chain {entry.chain}"
        if entry.previous != self.hash:
            return "the previous hash is not that of the entry before"
        if entry.recorded_at < self.recorded_at:
            return "recorded_at goes back"
        if self._anchors.get(expected, stored.hash) != stored.hash:
            return "the hash is not the one that an anchor names"
        return None


def verify_chain(
    chain: str,
    rows: Iterable[StoredEntry],
    *,
    head: Head | None,
    anchors: Iterable[Anchor] = (),
) -> Finding | None:
    """Return the first fault of a chain whose rows come in order of sequence, or None when it is whole."""
    check = ChainCheck(chain, anchors)
    for row in rows:
        if (finding := check.add(row)) is not None:
            return finding
    return check.close(head)


def read_anchors(text: str) -> tuple[Anchor, ...]:
    """Read anchors, one ``chain sequence hash`` a line; empty lines and ``#`` lines are skipped."""
    anchors = []
    for number, line in enumerate(text.splitlines(), start=1):
        words = line.split()
        if not words or words[0].startswith("#"):
            continue
        try:
            chain, sequence, digest = words
            anchor = Anchor(chain, int(sequence), digest.lower())
            well_formed = len(bytes.fromhex(anchor.hash)) == 32 and anchor.sequence > 0
        except ValueError:
            well_formed = False
        if not well_formed:
            raise ValueError(f"line {number} is not 'chain sequence hash': {line!r}")
        anchors.append(anchor)
    return tuple(anchors)
