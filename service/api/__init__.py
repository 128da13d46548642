"""The HTTP API: a view is a typed adapter; it holds no rule and no SQL."""

from __future__ import annotations

from typing import Any, cast

import yaml
from flask import Flask, Response, current_app, request

from service.api import (
    acceptance_limits,
    budgets,
    converters,
    decisions,
    extensions,
    global_risks,
    health,
    ledger,
    lots,
    master_data,
    plant,
    renewals,
    requests,
    set_points,
    specifications,
    studies,
    study_plans,
)
from service.api.description import describe_api, public_operations
from service.api.reader import LARGEST_BODY
from service.api.smorest import ShoalmarkApi, is_api_path

__all__ = ["openapi_document", "openapi_text", "register"]

BLUEPRINTS = (
    decisions.blueprint,
    lots.blueprint,
    acceptance_limits.blueprint,
    studies.blueprint,
    renewals.blueprint,
    extensions.blueprint,
    study_plans.blueprint,
    global_risks.blueprint,
    set_points.blueprint,
    budgets.blueprint,
    specifications.blueprint,
    *master_data.BLUEPRINTS,
    plant.blueprint,
    ledger.blueprint,
)


def register(app: Flask) -> None:
    """Put the API into an application whose ``shoalmark`` extension holds the services."""
    app.config["MAX_CONTENT_LENGTH"] = LARGEST_BODY
    converters.register(app)
    api = ShoalmarkApi(app, spec_kwargs=describe_api())
    app.extensions["shoalmark.api"] = api
    for blueprint in BLUEPRINTS:
        api.register_blueprint(blueprint)
    app.register_blueprint(health.blueprint)
    app.add_url_rule("/openapi.yaml", "openapi", _serve_description, methods=["GET"])
    for endpoint, operation in public_operations().items():
        api.describe_public(endpoint, operation)
    app.before_request(_authenticate)


def openapi_document(app: Flask) -> dict[str, Any]:
    """Write the description of the API that ``app`` serves (OpenAPI 3.1)."""
    api = cast(ShoalmarkApi, app.extensions["shoalmark.api"])
    document = cast(dict[str, Any], api.spec.to_dict())
    return {"openapi": document.pop("openapi"), **document}


class _Plain(yaml.SafeDumper):
    """Writes what stands twice twice: a reader of openapi.yaml should not have to follow anchors."""

    def ignore_aliases(self, data: Any) -> bool:
        """Never refer to another place."""
        return True


def _as_block(dumper: yaml.SafeDumper, text: str) -> yaml.ScalarNode:
    """Write text of several lines as such."""
    style = "|" if "\n" in text else None
    return dumper.represent_scalar("tag:yaml.org,2002:str", text, style=style)


_Plain.add_representer(str, _as_block)


def openapi_text(app: Flask) -> str:
    """Write the description as the YAML text of openapi.yaml."""
    return yaml.dump(openapi_document(app), Dumper=_Plain, sort_keys=False, allow_unicode=True, width=110)


def _authenticate() -> None:
    if is_api_path(request.path):
        requests.authenticate()


def _serve_description() -> Response:
    # Written once: it takes most of a second, and anybody may ask for it.
    text = current_app.extensions.get("shoalmark.openapi") or openapi_text(current_app)
    current_app.extensions["shoalmark.openapi"] = text
    return Response(text, mimetype="application/yaml")
