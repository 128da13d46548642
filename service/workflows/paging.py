"""Lists in parts: a cursor names the last thing that was shown; the next part begins after it."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Any, TypeVar

from service.errors import Fault, InvalidRequest
from service.workflows.recording import Page

_Row = TypeVar("_Row")
_Place = TypeVar("_Place")


def start_after(
    cursor: str | None, find: Callable[[str], _Row | None], place: Callable[[_Row], _Place]
) -> _Place | None:
    """Find where a part begins. Raises InvalidRequest for a cursor that no list gave out."""
    if cursor is None:
        return None
    row = find(cursor)
    if row is None:
        raise InvalidRequest(
            "1 fault.",
            faults=(
                Fault(f"got {cursor[:80]!r}", expected="the `next` of the part before", parameter="cursor"),
            ),
        )
    return place(row)


def page_of(
    found: Sequence[_Row],
    limit: int,
    item: Callable[[_Row], dict[str, Any]],
    cursor: Callable[[_Row], str],
) -> Page:
    """Make a page of at most ``limit`` items from up to ``limit + 1`` rows found."""
    shown = found[:limit]
    following = cursor(shown[-1]) if len(found) > limit else None
    return Page(tuple(item(row) for row in shown), following)
