"""The plant document: calendar and defaults that can change a verdict."""

from __future__ import annotations

from flask_smorest import Blueprint

from service.api.versioned import Versioned, register_versions
from service.documents import Plant

blueprint = Blueprint("plant", __name__, description="Calendar and defaults of the plant.")

register_versions(blueprint, "/v1/plant", Versioned("plant", Plant, "PlantVersion"), code="plant")
