"""Specifications: what a product must meet, for whom, by which rule."""

from __future__ import annotations

from flask_smorest import Blueprint

from service.api.versioned import Versioned, register_collection, register_versions
from service.documents import Specification

blueprint = Blueprint("specifications", __name__, description="What a product must meet, and by which rule.")

_KIND = Versioned("specification", Specification, "SpecificationVersion")

register_collection(blueprint, "/v1/specifications", _KIND)
register_versions(blueprint, "/v1/specifications/<code:code>", _KIND)
