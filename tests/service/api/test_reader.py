"""The strict JSON reader.

RFC 8259 says what JSON is. RFC 7493 (I-JSON), 2.1 and 2.3, forbids lone surrogates and equal
names (from memory).
"""

from __future__ import annotations

import json
import math
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from service.api.reader import DEEPEST, LARGEST_BODY, read
from service.errors import InvalidRequest, ServiceError, TooLarge, Unreadable

values = st.recursive(
    st.none()
    | st.booleans()
    | st.integers(-(10**12), 10**12)
    | st.floats(allow_nan=False, allow_infinity=False)
    | st.text(st.characters(exclude_categories=("Cs",), exclude_characters="\x00"), max_size=8),
    lambda inner: (
        st.lists(inner, max_size=3)
        | st.dictionaries(
            st.text(st.characters(exclude_categories=("Cs",), exclude_characters="\x00"), max_size=5),
            inner,
            max_size=3,
        )
    ),
    max_leaves=8,
)


@given(st.dictionaries(st.from_regex("[a-z]{1,5}", fullmatch=True), values, max_size=4), st.booleans())
@settings(max_examples=80, deadline=None)
def test_reads_what_the_standard_library_writes(document: dict[str, Any], escaped: bool) -> None:
    assert read(json.dumps(document, ensure_ascii=escaped).encode()) == document


@given(st.binary(max_size=60))
@settings(max_examples=80, deadline=None)
def test_any_bytes_are_read_or_refused_by_an_error_of_ours(body: bytes) -> None:
    try:
        assert isinstance(read(body), dict)
    except ServiceError as error:
        assert error.message


def faults(body: bytes) -> list[tuple[str | None, str]]:
    with pytest.raises(Unreadable) as caught:
        read(body)
    return [(fault.pointer, fault.detail) for fault in caught.value.faults]


def test_a_member_that_stands_twice_is_named_with_its_place() -> None:
    body = b'{"readings": [{}, {"values": {"moisture": 3.1, "moisture": 3.2}}]}'
    ((pointer, detail),) = faults(body)
    assert pointer == "#/readings/1/values"
    assert detail == 'the member "moisture" stands here twice'


def test_all_that_is_wrong_is_found_at_once() -> None:
    body = b'{"a": NaN, "b": [1, -Infinity, 1e999], "c": {"d/e": 1, "d/e": "\\ud800"}, "f": "\\u0000"}'
    assert [pointer for pointer, _ in faults(body)] == [
        "#/a",
        "#/b/1",
        "#/b/2",
        "#/c",
        "#/c/d~1e",
        "#/f",
    ]


def test_a_pair_of_surrogates_is_a_character() -> None:
    assert read(b'{"a": "\\ud83d\\ude00"}') == {"a": "\N{GRINNING FACE}"}


@pytest.mark.parametrize(
    ("body", "words"),
    [
        (b"", "empty"),
        (b" \n", "empty"),
        (b'{"a": 1', "no JSON"),
        (b'{"a": 1} x', "no JSON"),
        (b"{'a': 1}", "no JSON"),
        (b'{"a": 01}', "no JSON"),
        (b'{"a": "\x01"}', "no JSON"),
        (b'\xef\xbb\xbf{"a": 1}', "byte order mark"),
        (b'{"a": "\xff"}', "not UTF-8"),
        ('{"a": "\ud800"}'.encode("utf-8", "surrogatepass"), "not UTF-8"),
        (b'{"a": ' * 10_000 + b"1" + b"}" * 10_000, "too deep"),
        (b"[" * 10_000 + b"]" * 10_000, "too deep"),
        (b"[" * 200_000, "too deep"),
        (b'{"a": ' + b"[" * 200_000, "too deep"),
        (b'{"a": "' + b'\\"[' * 500_000, "no JSON"),
        (b'\\"' * 500_000 + b"[" * 100, "no JSON"),
        (b'{"a": NaN, "b": ' + b"[" * 10_000 + b"]" * 10_000 + b"}", "too deep"),
    ],
    ids=lambda value: value[:20].decode("latin-1") if isinstance(value, bytes) else value,
)
def test_what_is_no_json_object_is_refused_in_words(body: bytes, words: str) -> None:
    with pytest.raises(Unreadable, match=words):
        read(body)


def test_the_depth_that_is_taken_is_exact() -> None:
    def nested(levels: int) -> bytes:
        return b'{"a": ' + b"[" * (levels - 1) + b"]" * (levels - 1) + b"}"

    assert read(nested(DEEPEST))
    with pytest.raises(Unreadable, match="too deep"):
        read(nested(DEEPEST + 1))


def test_brackets_inside_texts_are_no_depth() -> None:
    assert read(b'{"a": "' + b"[{" * 200 + b'"}') == {"a": "[{" * 200}
    assert read(b'{"a": "' + b'\\"[' * 200 + b'"}') == {"a": '"[' * 200}
    assert read(b'{"a": "\\\\", "b": [' + b"[]," * 200 + b"[]]}")["b"] == [[]] * 201


@pytest.mark.parametrize("body", [b"[]", b"3", b'"text"', b"null"])
def test_a_document_that_is_no_object_is_a_fault_of_the_request(body: bytes) -> None:
    with pytest.raises(InvalidRequest) as caught:
        read(body)
    assert [fault.pointer for fault in caught.value.faults] == ["#"]


def test_a_body_beyond_the_bound_is_too_large() -> None:
    with pytest.raises(TooLarge):
        read(b" " * (LARGEST_BODY + 1))


def test_numbers_keep_their_binary_value() -> None:
    document = read(b'{"a": 0.1, "b": 1e308, "c": -0.0, "d": 5e-324, "e": 3}')
    assert document == {"a": 0.1, "b": 1e308, "c": 0.0, "d": 5e-324, "e": 3}
    assert math.copysign(1, document["c"]) == -1
    assert type(document["e"]) is int


def test_a_number_of_thousands_of_digits_is_refused() -> None:
    ((pointer, detail),) = faults(b'{"a": ' + b"9" * 5000 + b"}")
    assert pointer == "#/a"
    assert "5000 digits" in detail
