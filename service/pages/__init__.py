"""The pages: server-rendered twins of the API's calls. Here: the start page and the page for errors."""

from __future__ import annotations

from flask import Flask

from service.pages import errors, start

__all__ = ["register"]


def register(app: Flask) -> None:
    """Put the pages into an application whose ``shoalmark`` extension holds the services."""
    app.register_blueprint(start.blueprint)
    # The API answers errors below its prefix; it hands all others to this function, which it does not know.
    app.extensions["shoalmark.error_page"] = errors.error_page
    app.after_request(start.guard)
    demo = app.extensions["shoalmark"].settings.demo
    app.context_processor(lambda: {"demo": demo})
