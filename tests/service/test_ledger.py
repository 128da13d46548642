"""The record's form, against the bytes as contracts fix them and SHA-256 as published."""

from __future__ import annotations

import hashlib
from dataclasses import replace
from datetime import UTC, datetime, timedelta, timezone

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from service.ledger import (
    GENESIS,
    Anchor,
    Entry,
    EntryError,
    Head,
    StoredEntry,
    format_instant,
    hash_of,
    read_anchors,
    read_entry,
    verify_chain,
    write_entry,
)

BYTES = (
    '{"format":1,"chain":"tower-1","sequence":1,"previous":"' + "0" * 64 + '",'
    '"recorded_at":"2026-03-02T05:12:43.120934Z","actor":"mes","kind":"decision",'
    '"content":{"lot":"W26-04711","remark":"15 °C, für B","estimate":3.135,"limit":null,"held":false}}'
).encode()
CONTENT = {"lot": "W26-04711", "remark": "15 °C, für B", "estimate": 3.135, "limit": None, "held": False}


def an_entry(sequence: int = 1, previous: str = GENESIS, **changes: object) -> Entry:
    members: dict = {
        "chain": "tower-1",
        "sequence": sequence,
        "previous": previous,
        "recorded_at": f"2026-03-02T05:12:4{sequence}.000000Z",
        "actor": "mes",
        "kind": "note",
        "content": {"n": sequence},
    }
    return write_entry(**{**members, **changes})


def a_chain(length: int = 4) -> list[StoredEntry]:
    rows: list[StoredEntry] = []
    for sequence in range(1, length + 1):
        entry = an_entry(sequence, rows[-1].hash if rows else GENESIS)
        rows.append(stored(entry))
    return rows


def stored(entry: Entry, **changes: object) -> StoredEntry:
    names = ("chain", "sequence", "recorded_at", "actor", "kind", "previous", "hash", "body")
    return replace(StoredEntry(**{name: getattr(entry, name) for name in names}), **changes)


def head_of(rows: list[StoredEntry]) -> Head:
    return Head(rows[-1].chain, rows[-1].sequence, rows[-1].hash, rows[-1].recorded_at)


def test_the_bytes_are_exactly_those_of_the_contract():
    entry = write_entry(
        chain="tower-1",
        sequence=1,
        previous=GENESIS,
        recorded_at="2026-03-02T05:12:43.120934Z",
        actor="mes",
        kind="decision",
        content=CONTENT,
    )
    assert entry.body == BYTES
    assert entry.hash == hashlib.sha256(BYTES).hexdigest()
    assert entry.identity == "tower-1.1"


def test_the_hash_is_sha_256():
    # FIPS 180-4, the one-block message "abc" of NIST's example values (from memory)
    assert hash_of(b"abc") == "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"


def test_instants_are_utc_with_microseconds_and_sort_as_time():
    east = timezone(timedelta(hours=1))
    # the reading's and the answer's instants of contracts: 06:12:43.120934+01:00 is 05:12:43.120934Z
    assert format_instant(datetime(2026, 3, 2, 6, 12, 43, 120934, east)) == "2026-03-02T05:12:43.120934Z"
    assert format_instant(datetime(2026, 3, 2, 5, 12, 43, 0, UTC)) == "2026-03-02T05:12:43.000000Z"
    with pytest.raises(ValueError, match="time zone"):
        format_instant(datetime(2026, 3, 2))


json_values = st.recursive(
    st.none()
    | st.booleans()
    | st.integers(-(2**53), 2**53)
    | st.floats(allow_nan=False, allow_infinity=False)
    | st.text(st.characters(exclude_categories=["Cs"]), max_size=8),
    lambda inner: (
        st.lists(inner, max_size=3) | st.dictionaries(st.text("aé\0😀", max_size=3), inner, max_size=3)
    ),
    max_leaves=8,
)


@settings(max_examples=60)
@given(content=st.dictionaries(st.text("abc", max_size=3), json_values, max_size=4))
def test_what_was_written_is_read_back_equal_to_the_last_bit(content):
    written = an_entry(content=content)
    read = read_entry(written.body)
    assert read == written
    assert read.content == content == written.content


@pytest.mark.parametrize("value", [float("nan"), float("inf"), "\ud800", {1, 2}, b"bytes"])
def test_content_without_an_exact_json_text_is_refused(value):
    with pytest.raises(EntryError, match="cannot be recorded"):
        an_entry(content={"value": value})


@pytest.mark.parametrize(
    ("body", "message"),
    [
        (b"", "not JSON"),
        (b"\xff", "not JSON"),
        (b"[" * 100_000, "not JSON"),
        (b"[]", "members"),
        (BYTES.replace(b'"actor":"mes",', b""), "members"),
        (BYTES.replace(b'"held":false', b'"lot":"other"'), "twice"),
        (BYTES.replace(b'"format":1', b'"format":2'), "format 2"),
        (BYTES.replace(b'"sequence":1', b'"sequence":true'), "type"),
        (BYTES.replace(b'"actor":"mes"', b'"actor":7'), "type"),
        (BYTES[: BYTES.index(b'"content":')] + b'"content":[]}', "type"),
    ],
)
def test_bytes_that_are_no_entry_are_refused(body, message):
    with pytest.raises(EntryError, match=message):
        read_entry(body)


def test_a_whole_chain_has_no_finding():
    rows = a_chain()
    assert verify_chain("tower-1", rows, head=head_of(rows)) is None
    assert verify_chain("tower-1", [], head=None) is None


def alter(rows: list[StoredEntry], place: int, **changes: object) -> None:
    rows[place] = replace(rows[place], **changes)


def forge(rows: list[StoredEntry], place: int, **changes: object) -> None:
    """Rewrite an entry so that its own hash is right again."""
    entry = an_entry(place + 1, **{"previous": rows[place].previous, **changes})
    rows[place] = stored(entry)


TAMPERINGS = {
    "one byte": (
        lambda r: alter(r, 1, body=r[1].body.replace(b'{"n":2}', b'{"n":3}')),
        2,
        "hash is not that",
    ),
    "forged entry": (lambda r: forge(r, 1, content={"n": 7}), 3, "previous hash"),
    "removed entry": (lambda r: r.pop(1), 2, "entry 2 is missing"),
    "removed first entry": (lambda r: r.pop(0), 1, "entry 1 is missing"),
    "entry twice": (lambda r: r.insert(1, r[0]), 2, "sequence goes back"),
    "exchanged entries": (lambda r: r.insert(1, r.pop(2)), 2, "entry 2 is missing"),
    "actor column": (lambda r: alter(r, 2, actor="somebody"), 3, "column actor"),
    "kind column": (lambda r: alter(r, 2, kind="decision"), 3, "column kind"),
    "time column": (
        lambda r: alter(r, 2, recorded_at="2026-03-02T05:12:44.000000Z"),
        3,
        "column recorded_at",
    ),
    "previous column": (lambda r: alter(r, 2, previous=GENESIS), 3, "column previous"),
    "chain column": (lambda r: alter(r, 2, chain="tower-2"), 3, "column chain"),
    "hash column": (lambda r: alter(r, 2, hash="f" * 64), 3, "hash is not that"),
    "column of another type": (lambda r: alter(r, 2, sequence="three"), 3, "another type"),
    "time goes back": (
        lambda r: forge(r, 3, recorded_at="2026-03-02T05:00:00.000000Z"),
        4,
        "recorded_at goes back",
    ),
    "entry of another chain": (
        lambda r: alter(r, 0, **vars(stored(an_entry(chain="plant")))),
        1,
        "chain plant",
    ),
    "no entry": (lambda r: alter(r, 3, body=b"{}", hash=hash_of(b"{}")), 4, "no entry"),
}


@pytest.mark.parametrize("name", TAMPERINGS)
def test_the_first_altered_entry_is_named(name):
    tamper, sequence, detail = TAMPERINGS[name]
    rows = a_chain()
    head = head_of(rows)
    tamper(rows)
    finding = verify_chain("tower-1", rows, head=head)
    assert finding is not None
    assert (finding.chain, finding.sequence) == ("tower-1", sequence)
    assert detail in finding.detail
    assert str(finding).startswith(f"tower-1.{sequence}: ")


def test_a_chain_cut_off_is_found_by_its_head_and_with_its_head_by_an_anchor():
    rows = a_chain()
    anchor = Anchor("tower-1", 4, rows[3].hash)
    cut = rows[:3]
    assert "head names entry 4" in verify_chain("tower-1", cut, head=head_of(rows)).detail
    assert verify_chain("tower-1", cut, head=head_of(cut)) is None
    assert "ends at 3" in verify_chain("tower-1", cut, head=head_of(cut), anchors=[anchor]).detail
    assert "ends at 0" in verify_chain("tower-1", [], head=None, anchors=[anchor]).detail


def test_a_chain_rewritten_from_the_start_is_found_by_an_anchor():
    old, new = a_chain(), [stored(an_entry(1, content={"n": "better"}))]
    new.append(stored(an_entry(2, new[0].hash)))
    assert verify_chain("tower-1", new, head=head_of(new)) is None
    finding = verify_chain("tower-1", new, head=head_of(new), anchors=[Anchor("tower-1", 2, old[1].hash)])
    assert finding.sequence == 2
    assert "anchor" in finding.detail


def test_heads_and_anchors_that_do_not_fit_are_findings():
    rows = a_chain()
    assert "no head" in verify_chain("tower-1", rows, head=None).detail
    late = replace(head_of(rows), recorded_at="2026-03-02T06:00:00.000000Z")
    assert "another recorded_at" in verify_chain("tower-1", rows, head=late).detail
    two = [Anchor("tower-1", 2, rows[1].hash), Anchor("tower-1", 2, "f" * 64)]
    assert "contradict" in verify_chain("tower-1", rows, head=head_of(rows), anchors=two).detail
    other = [Anchor("plant", 9, "f" * 64)]
    assert verify_chain("tower-1", rows, head=head_of(rows), anchors=other) is None


def test_anchors_are_read_a_line_each():
    digest = "AB" * 32
    assert read_anchors(f"# kept by the MES\n\ntower-1 12 {digest}\n") == (Anchor("tower-1", 12, "ab" * 32),)


@pytest.mark.parametrize(
    "line", ["tower-1 12", "tower-1 x " + "ab" * 32, "tower-1 0 " + "ab" * 32, "a 1 abcd"]
)
def test_lines_that_are_no_anchor_are_refused(line):
    with pytest.raises(ValueError, match="line 2"):
        read_anchors(f"plant 1 {'0' * 64}\n{line}")
