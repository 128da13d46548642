"""A study as it comes over HTTP: a JSON document, or CSV whose other members stand in the query.

A member that is text in the document stands in the query as it is, any other one as JSON. What arrives either
way is one document, so that a key, its fingerprint and the answer do not depend on the way.
"""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import replace

from flask import g, request
from werkzeug.exceptions import UnsupportedMediaType

from service.api import requests
from service.api.forms import Form
from service.api.operations import parameter
from service.api.reader import request_bytes
from service.documents import Study
from service.errors import Fault, InvalidRequest
from service.schemas import load
from service.workflows.csv_files import read_csv
from service.workflows.study_files import STRUCTURES, TEXTS, members_of, study_document

CSV = "text/csv"
CSV_EXAMPLE = "sample,replicate,reading\nP01,1,3.11\nP01,2,3.16\nP02,1,2.75\nP02,2,2.81\n"
LONGEST_MEMBER = 8000
CSV_QUERY: tuple[Form, ...] = (
    *(parameter(name, "Of a study whose body is text/csv.") for name in TEXTS),
    *(parameter(name, "Of a study whose body is text/csv; JSON.") for name in STRUCTURES),
)


def study() -> Study:
    """Read the study in the body and, for CSV, the query of the request at hand.

    Raises UnsupportedMediaType, Unreadable, TooLarge or InvalidRequest.
    """
    if request.mimetype == "application/json":
        return requests.body(Study)
    if request.mimetype != CSV:
        got_type = request.mimetype or "no content type"
        raise UnsupportedMediaType(f"Got {got_type}; the body has to be application/json or {CSV}.")
    said = requests.query(*TEXTS, *STRUCTURES, longest=LONGEST_MEMBER)
    content = request_bytes()
    table = read_csv(content, request.mimetype_params.get("charset"))
    g.body = study_document(members_of(said), table, name="CSV body", content=content)
    return load(Study, g.body)


@contextmanager
def faults_where_they_were_said() -> Iterator[None]:
    """Locate faults of a CSV request: cells and headings in the document, all else in the query."""
    try:
        yield
    except InvalidRequest as error:
        if request.mimetype == CSV:
            error.faults = tuple(map(_in_query, error.faults))
        raise


def _in_query(fault: Fault) -> Fault:
    member, _, rest = (fault.pointer or "#").removeprefix("#").removeprefix("/").partition("/")
    if member not in (*TEXTS, *STRUCTURES):
        return fault
    detail = f"at {rest}: {fault.detail}" if rest else fault.detail
    return replace(fault, pointer=None, parameter=member, detail=detail)
