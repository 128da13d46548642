"""The service around the computation: HTTP, storage, access and the command line.

``create_app`` is the only place that wires anything; importing this package imports nothing heavy.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from flask import Flask

    from service.helpers import Helper
    from service.settings import Settings
    from service.workflows.services import Services


def create_services(settings: Settings, helper: Helper | None = None) -> Services:
    """Open the database and its one writer; the schema must be current.

    Evaluations may hold half of the threads that answer requests, the lines find the other half.
    """
    from service.helpers import Helper
    from service.store.unit_of_work import Database
    from service.store.writer import Writer
    from service.workflows.services import Services

    database = Database(settings.database_url)
    evaluating = helper or Helper(most=max(1, settings.threads // 2))
    return Services(settings, database, Writer(database), helper=evaluating)


def create_app(services: Services) -> Flask:
    """Put the application together from its services; API and pages, nothing else."""
    from flask import Flask
    from werkzeug.middleware.proxy_fix import ProxyFix

    from service import api, pages
    from service.settings import secret_key

    app = Flask(__name__, static_folder=None, template_folder=None)
    app.secret_key = secret_key(services.settings)
    app.extensions["shoalmark"] = services
    api.register(app)
    pages.register(app)
    if services.settings.trusted_proxies:
        hops = services.settings.trusted_proxies
        app.wsgi_app = ProxyFix(  # type: ignore[method-assign] # Flask's documented way
            app.wsgi_app, x_for=hops, x_proto=hops, x_host=hops
        )
    return app


def describe_api() -> str:
    """Write openapi.yaml from the code; needs neither settings nor a database."""
    from flask import Flask

    from service import api

    app = Flask(__name__, static_folder=None, template_folder=None)
    api.register(app)
    return api.openapi_text(app)
