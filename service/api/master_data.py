"""Products, characteristics, lines, analyzers, calibrations, laboratories: put, read, list."""

from __future__ import annotations

from typing import Any

from flask import Response
from flask_smorest import Blueprint

from service import documents
from service.api import requests
from service.api.answers import conditional, listed, master_put
from service.api.operations import PAGING, Operation, describe
from service.workflows import master_data
from service.workflows.recording import Page


def _put(kind: str, document: Any) -> Response:
    with requests.creation_only():
        result = master_data.put(
            requests.services(),
            requests.actor(),
            kind,
            document,
            if_match=requests.if_match(),
            request=requests.replaceable(),
        )
    return master_put(result)


def _get(kind: str, key: str) -> Response:
    requests.query()
    found = master_data.get(requests.services(), requests.actor(), kind, key)
    return conditional(found.document, found.revision)


def _list(kind: str, prefix: str | None = None) -> Response:
    page = requests.page()
    return listed(master_data.listing(requests.services(), requests.actor(), kind, prefix=prefix, **page))


def _putting(name: str, kind: type[Any]) -> Operation:
    return Operation(name, (200, 201), body=kind, key="optional", if_match=True, etag=True)


def _reading(name: str) -> Operation:
    return Operation(name, conditional=True, problems=(422,))


def _listing(name: str) -> Operation:
    return Operation(f"{name}Page", query=PAGING)


products = Blueprint("products", __name__, description="What is made and judged, and its characteristics.")
lines = Blueprint("lines", __name__, description="Production lines.")
analyzers = Blueprint("analyzers", __name__, description="Analyzers and their calibrations.")
laboratories = Blueprint("laboratories", __name__, description="Laboratories that give reference values.")

BLUEPRINTS = (products, lines, analyzers, laboratories)


@describe(products, "/v1/products", "GET", _listing("Product"))
def list_products() -> Response:
    """List the products."""
    return _list("product")


@describe(products, "/v1/products/<code:code>", "GET", _reading("Product"))
def get_product(code: str) -> Response:
    """Read a product."""
    return _get("product", code)


@describe(products, "/v1/products/<code:code>", "PUT", _putting("Product", documents.Product))
def put_product(code: str) -> Response:
    """Make or replace a product."""
    document = requests.body(documents.Product)
    requests.same_identity(document, code=code)
    return _put("product", document)


_CHARACTERISTICS = "/v1/products/<code:product>/characteristics"


@describe(products, _CHARACTERISTICS, "GET", _listing("Characteristic"))
def list_characteristics(product: str) -> Response:
    """List the characteristics of a product."""
    return _list("characteristic", f"{product}/")


@describe(products, f"{_CHARACTERISTICS}/<code:code>", "GET", _reading("Characteristic"))
def get_characteristic(product: str, code: str) -> Response:
    """Read a characteristic."""
    return _get("characteristic", f"{product}/{code}")


@describe(
    products,
    f"{_CHARACTERISTICS}/<code:code>",
    "PUT",
    _putting("Characteristic", documents.Characteristic),
)
def put_characteristic(product: str, code: str) -> Response:
    """Make or replace a characteristic."""
    document = requests.body(documents.Characteristic)
    requests.same_identity(document, code=code, product=product)
    return _put("characteristic", document)


@describe(lines, "/v1/lines", "GET", _listing("Line"))
def list_lines() -> Response:
    """List the lines."""
    return _list("line")


@describe(lines, "/v1/lines/<code:code>", "GET", _reading("Line"))
def get_line(code: str) -> Response:
    """Read a line."""
    return _get("line", code)


@describe(lines, "/v1/lines/<code:code>", "PUT", _putting("Line", documents.Line))
def put_line(code: str) -> Response:
    """Make or replace a line."""
    document = requests.body(documents.Line)
    requests.same_identity(document, code=code)
    return _put("line", document)


@describe(analyzers, "/v1/analyzers", "GET", _listing("Analyzer"))
def list_analyzers() -> Response:
    """List the analyzers."""
    return _list("analyzer")


@describe(analyzers, "/v1/analyzers/<code:code>", "GET", _reading("Analyzer"))
def get_analyzer(code: str) -> Response:
    """Read an analyzer."""
    return _get("analyzer", code)


@describe(analyzers, "/v1/analyzers/<code:code>", "PUT", _putting("Analyzer", documents.Analyzer))
def put_analyzer(code: str) -> Response:
    """Make or replace an analyzer."""
    document = requests.body(documents.Analyzer)
    requests.same_identity(document, code=code)
    return _put("analyzer", document)


_CALIBRATION = "/v1/analyzers/<code:analyzer>/calibrations/<code:code>"


@describe(analyzers, "/v1/analyzers/<code:analyzer>/calibrations", "GET", _listing("Calibration"))
def list_calibrations(analyzer: str) -> Response:
    """List the calibrations of an analyzer; a part of the list may hold fewer than its limit."""
    page = requests.page()
    found = master_data.listing(requests.services(), requests.actor(), "calibration", **page)
    items = tuple(item for item in found.items if item["analyzer"] == analyzer)
    return listed(Page(items, found.next))


@describe(analyzers, _CALIBRATION, "GET", _reading("Calibration"))
def get_calibration(analyzer: str, code: str) -> Response:
    """Read a calibration."""
    found = master_data.get(requests.services(), requests.actor(), "calibration", code)
    requests.belongs(found.document["analyzer"] == analyzer, f"calibration {code!r} of {analyzer!r}")
    return conditional(found.document, found.revision)


@describe(analyzers, _CALIBRATION, "PUT", _putting("Calibration", documents.Calibration))
def put_calibration(analyzer: str, code: str) -> Response:
    """Make or replace a calibration."""
    document = requests.body(documents.Calibration)
    requests.same_identity(document, code=code, analyzer=analyzer)
    return _put("calibration", document)


@describe(laboratories, "/v1/laboratories", "GET", _listing("Laboratory"))
def list_laboratories() -> Response:
    """List the laboratories."""
    return _list("laboratory")


@describe(laboratories, "/v1/laboratories/<code:code>", "GET", _reading("Laboratory"))
def get_laboratory(code: str) -> Response:
    """Read a laboratory."""
    return _get("laboratory", code)


@describe(laboratories, "/v1/laboratories/<code:code>", "PUT", _putting("Laboratory", documents.Laboratory))
def put_laboratory(code: str) -> Response:
    """Make or replace a laboratory."""
    document = requests.body(documents.Laboratory)
    requests.same_identity(document, code=code)
    return _put("laboratory", document)
