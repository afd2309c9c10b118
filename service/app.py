"""``create_app`` wires the service, and does nothing else."""

from __future__ import annotations

import os

from flask import Flask

from service.ready import get_ready
from service.settings import Settings, SettingsError
from service.tallies import Tallies
from service.web import headers, problems
from service.web.alarms import alarms
from service.web.batches import batches
from service.web.checks import checks
from service.web.documentation import documentation
from service.web.health import health
from service.web.merchants import merchants
from service.web.openapi import Api
from service.web.parts import assemble
from service.web.policies import policies

RESOURCES = (batches, merchants, alarms, policies, checks, health, documentation)


def create_app(settings: Settings | None = None, tallies: Tallies | None = None) -> Flask:
    """Return the service as a WSGI application.

    Parameters
    ----------
    settings : Settings, optional
        Read from the environment where not given.
    tallies : Tallies, optional
        Opened by the settings where not given, with its sweep.

    Raises
    ------
    SettingsError
        If the settings are wrong, or name no store to open.
    StoreError
        If the store does not fit.
    """
    settings = settings or Settings.from_environment(os.environ)
    app = Flask(__name__, static_folder=None)
    app.config["MAX_CONTENT_LENGTH"] = settings.max_body
    app.url_map.merge_slashes = False
    app.extensions["tallyward"] = assemble(settings, tallies or _opened(settings))
    headers.register(app)
    problems.register(app)
    api = Api(app)
    for resource in RESOURCES:
        api.register_blueprint(resource)
    return app


def _opened(settings: Settings) -> Tallies:
    if settings.redis_url is None:
        fault = "TALLYWARD_REDIS_URL is not set; `tallyward serve` starts a store and sets it"
        raise SettingsError([fault])
    get_ready()
    tallies = Tallies(settings)
    tallies.sweep.start()
    return tallies
