"""A file of data and what was said about it, put together to the document of a study."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from typing import Any, Final

from service.errors import Fault, InvalidRequest
from service.schemas.base import counted, got
from service.workflows.study_tables import Table, table_members

# Members that are text in the document; what is said of any other is JSON.
TEXTS: Final = (
    *("code", "design", "product", "characteristic", "unit", "laboratory"),
    *("done_on", "serves_until", "done_by", "procedure"),
)
STRUCTURES: Final = (
    *("calibrations", "reference_methods", "independent", "characteristics", "named_sources", "set_aside"),
    *("options", "source"),
)
_DEEPEST: Final = 200


def members_of(said: Mapping[str, str]) -> dict[str, Any]:
    """Read what was said of a study, member by member: a text as it stands, any other member as JSON.

    Raises
    ------
    InvalidRequest
        A member is unknown, or no JSON; all faults are located as in the document.
    """
    members: dict[str, Any] = {}
    faults: list[Fault] = []
    for name, text in said.items():
        if name in TEXTS:
            members[name] = text
        elif name in STRUCTURES:
            try:
                members[name] = json_of(text)
            except ValueError as error:
                faults.append(Fault(f"{got(text)}, which is no JSON: {error}", "JSON", f"#/{name}"))
        else:
            expected = "only " + ", ".join(TEXTS + STRUCTURES)
            faults.append(Fault("unknown member, or one that the file itself gives", expected, f"#/{name}"))
    if faults:
        raise InvalidRequest(f"{counted(len(faults))}; nothing was recorded.", faults=tuple(faults))
    return members


def json_of(text: str) -> Any:
    """Parse JSON with one meaning only. Raises ValueError."""
    if text.count("[") + text.count("{") > _DEEPEST and max(text.count("["), text.count("{")) > _DEEPEST:
        raise ValueError("too many lists and objects")
    return json.loads(text, object_pairs_hook=_distinct, parse_constant=_no_constant)


def _distinct(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    members = dict(pairs)
    if len(members) != len(pairs):
        raise ValueError("a member stands there twice")
    return members


def _no_constant(text: str) -> Any:
    raise ValueError(f"{text} is no number of JSON")


def study_document(members: Mapping[str, Any], table: Table, *, name: str, content: bytes) -> dict[str, Any]:
    """Put the document of a study together, which names the file with the SHA-256 of its bytes.

    Raises
    ------
    InvalidRequest
        A heading or a cell cannot be read, or the file is another than ``source`` says.
    """
    digest = hashlib.sha256(content).hexdigest()
    characteristics = members.get("characteristics")
    codes = characteristics if isinstance(characteristics, list) else []
    read = table_members(
        table,
        design=members.get("design"),
        unit=members.get("unit"),
        characteristics=[code for code in codes if isinstance(code, str)],
    )
    return {**members, **read, "source": _source(members.get("source"), name, digest)}


def _source(stated: Any, name: str, digest: str) -> Any:
    if stated is None:
        return {"name": name, "sha256": digest}
    if not isinstance(stated, Mapping):
        return stated  # refused with the other members
    theirs = stated.get("sha256")
    if isinstance(theirs, str) and theirs.lower() != digest:
        fault = Fault(f"got {theirs[:64]!r}", f"{digest!r}, that of the file", "#/source/sha256")
        raise InvalidRequest("1 fault; nothing was recorded.", faults=(fault,))
    return {**stated, "sha256": digest}
