"""The service's own description."""

from __future__ import annotations

from typing import cast

import msgspec
from flask import Response, current_app

from schemas.front import Front
from service import __version__
from service.web.admission import admit
from service.web.method.page import method
from service.web.openapi import Api
from service.web.parts import parts
from service.web.resource import Resource, reply

documentation = Resource("documentation", __name__, description="This document. No key is needed.")
METHOD = method()

CAUTION = (
    "An alarm is a reason to look, never proof of fraud. A person reviews it, on lawful grounds, "
    "within local law, card-scheme rules and data protection."
)
LINKS = {
    "merchants": "/v1/merchants?sort=evidence",
    "alarms": "/v1/alarms",
    "policies": "/v1/policies",
    "method": "/method",
    "description": "/v1/openapi.json",
    "health": "/health/ready",
}


@documentation.path("/")
@documentation.answers(Front, "Where to go from here.")
def front_door() -> Response:
    """Say what is here; no key is needed."""
    return reply(
        {"service": "Tallyward", "version": __version__, "caution": CAUTION, "links": LINKS}
    )


@documentation.path("/method")
@documentation.answers_raw("text/html", {"type": "string"}, "A page that needs nothing else.")
def get_method() -> Response:
    """Explain what is measured, promised and not promised, for analysts and reviewers."""
    admit(parts().answering)
    return Response(METHOD.html, mimetype="text/html", headers=METHOD.headers)


@documentation.path("/v1/openapi.json")
@documentation.answers_raw("application/json", {"type": "object"}, "The OpenAPI 3.1 document.")
def get_openapi() -> Response:
    """Describe every path, field, error and role of the service."""
    admit(parts().answering)
    api = cast(Api, current_app.extensions["flask-smorest"]["apis"][""]["ext_obj"])
    return Response(msgspec.json.encode(api.document()), mimetype="application/json")
