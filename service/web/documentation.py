"""The service's own description."""

from __future__ import annotations

from typing import cast

import msgspec
from flask import Response, current_app

from service.web.openapi import Api
from service.web.resource import Resource

documentation = Resource("documentation", __name__, description="This document. No key is needed.")


@documentation.path("/v1/openapi.json")
@documentation.answers_raw("application/json", {"type": "object"}, "The OpenAPI 3.1 document.")
def get_openapi() -> Response:
    """Describe every path, field, error and role of the service."""
    api = cast(Api, current_app.extensions["flask-smorest"]["apis"][""]["ext_obj"])
    return Response(msgspec.json.encode(api.document()), mimetype="application/json")
