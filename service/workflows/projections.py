"""Whether the tables that decisions are made from still say what the record says.

A projection is a copy kept for look-up. Every one that can change a verdict is compared with the entries it
came from, so that whoever alters a table instead of an entry is found as well.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field
from typing import Any

from service.ledger import Entry, Finding
from service.store.unit_of_work import UnitOfWork
from service.workflows.judged_readings import JudgedReadings
from service.workflows.rules import RuleKey

Key = tuple[Any, ...]
Where = tuple[str, int]

MASTER_KINDS = ("product", "characteristic", "line", "analyzer", "calibration", "laboratory")
VERSION_ACTS = ("drafted", "redrafted", "submitted", "approved", "returned", "withdrawn")


@dataclass
class Expected:
    """What the tables have to hold, by key, with the entry that says it last."""

    rows: dict[Key, tuple[Any, Where]] = field(default_factory=dict)

    def add(self, entry: Entry) -> None:
        """Take up what one entry of the plant's chain says."""
        where = (entry.chain, entry.sequence)
        subject, _, act = entry.kind.rpartition("-")
        content = entry.content
        if act == "put" and subject in MASTER_KINDS:
            self.rows["master", subject, content["key"]] = (
                (content["revision"], content["document"]),
                where,
            )
        elif entry.kind == "study-recorded":
            code = content["study"]["code"]
            self.rows["study", code] = ((content["study"], content["evaluation"]), where)
        elif entry.kind in ("person-added", "token-added", "token-revoked"):
            self._add_account(entry, where)
        elif entry.kind == "study-extended":
            self.rows["extension", content["study"]] = (content["extension"], where)
            for part in content["versions"]:
                self._add_version("budget", part, where)
        elif subject == "renewal":
            for part in content.get("studies", ()):
                code = part["study"]["code"]
                self.rows["study", code] = ((part["study"], part["evaluation"]), where)
                if "extension" in part:
                    self.rows["extension", code] = (part["extension"], where)
            for part in content["versions"]:
                self._add_version("budget", part, where)
        elif act in VERSION_ACTS:
            self._add_version(subject, content, where)

    def _add_account(self, entry: Entry, where: Where) -> None:
        """Take up a person or a token; passwords and secrets are in no entry."""
        content = entry.content
        code = content["code"]
        if entry.kind == "person-added":
            # No act disables or renames a person, or gives other roles.
            self.rows["person", code] = ((content["name"], tuple(content["roles"]), None), where)
        elif entry.kind == "token-added":
            person = content["principal"] if content["person"] else None
            row = (content["principal"], person, tuple(content["roles"]), entry.recorded_at, None)
            self.rows["token", code] = (row, where)
        else:
            (*rest, _), _ = self.rows["token", code]
            self.rows["token", code] = ((*rest, entry.recorded_at), where)

    def _add_version(self, kind: str, content: dict[str, Any], where: Where) -> None:
        version = content["version"]
        code = version["code"]
        self.rows["version", kind, code, version["version"]] = (
            (
                version["state"],
                version["document"],
                content["evaluation"],
                version["lapses_at"],
                *_filed_under(version["document"]),
            ),
            where,
        )
        if content.get("supersedes") is not None:
            before = ("version", kind, code, content["supersedes"])
            (_, *rest), _ = self.rows[before]
            self.rows[before] = (("superseded", *rest), where)
        for stored in content.get("release_rules", ()):
            key = {name: value for name, value in stored.items() if name != "numbers"}
            self.rows["rule", *RuleKey(**key).to_document().values()] = (stored["numbers"], where)


def finding_of(unit_of_work: UnitOfWork) -> Finding | None:
    """Compare all projections with the record and give the first difference."""
    expected = Expected()
    judged = JudgedReadings(unit_of_work)
    for chain in unit_of_work.ledger.chain_names():
        for page in _pages(unit_of_work, chain):
            for entry in page:
                expected.add(entry)
            finding = _decision_finding(unit_of_work, chain, page) or judged.finding_among(page)
            if finding is not None:
                return finding
    return judged.finding_beyond() or _row_finding(unit_of_work, expected)


def _row_finding(unit_of_work: UnitOfWork, expected: Expected) -> Finding | None:
    found = dict(_rows(unit_of_work))
    for key, (row, (chain, sequence)) in expected.rows.items():
        if key not in found:
            return Finding(chain, sequence, f"{_name(key)} is missing from the tables")
        if found[key] != row:
            return Finding(chain, sequence, f"{_name(key)} stands in the tables other than it was recorded")
    for key in found:
        if key not in expected.rows:
            return Finding("plant", None, f"{_name(key)} stands in the tables, but no entry says so")
    return None


def _pages(unit_of_work: UnitOfWork, chain: str) -> Iterator[list[Entry]]:
    after = 0
    while page := unit_of_work.ledger.entries(chain, after=after):
        yield page
        after = page[-1].sequence


def _decision_finding(unit_of_work: UnitOfWork, chain: str, page: list[Entry]) -> Finding | None:
    copies = unit_of_work.decisions.copies(chain, range(page[0].sequence, page[-1].sequence + 1))
    for entry in page:
        if entry.kind != "decision":
            continue
        content = entry.content
        said = tuple(content[name] for name in ("product", "lot", "round", "outcome"))
        if copies.get(entry.sequence) != said:
            return Finding(chain, entry.sequence, "the columns of this decision differ from the entry")
    return None


def _rows(unit_of_work: UnitOfWork) -> Iterator[tuple[Key, Any]]:
    for kind in MASTER_KINDS:
        for stored in unit_of_work.master.all(kind):
            yield ("master", kind, stored.key), (stored.revision, stored.document)
    for study in unit_of_work.studies.all():
        yield ("study", study.code), (study.document, study.evaluation)
    for extension in unit_of_work.extensions.all():
        yield ("extension", extension.study), extension.document
    for kind in ("budget", "specification", "plant"):
        for version in unit_of_work.versions.all(kind):
            yield (
                ("version", kind, version.code, version.version),
                (
                    version.state,
                    version.document,
                    version.evaluation,
                    version.lapses_at,
                    version.product,
                    version.characteristic,
                ),
            )
    for rule in unit_of_work.rules.all():
        yield ("rule", *RuleKey.of(rule).to_document().values()), rule.numbers
    for person in unit_of_work.people.list():
        yield ("person", person.code), (person.name, person.roles, person.disabled_at)
    for token in unit_of_work.tokens.list():
        row = (token.principal, token.person, token.roles, token.created_at, token.revoked_at)
        yield ("token", token.code), row


def _filed_under(document: dict[str, Any]) -> tuple[str | None, str | None]:
    """Say by which product and characteristic a version is looked up."""
    return document.get("product"), document.get("characteristic")


def _name(key: Key) -> str:
    what, *rest = key
    return f"the {what} {'/'.join(str(part) for part in rest)}"
