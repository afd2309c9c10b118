"""The floor: what reading and decoding a batch and a small reply cost in Flask under gunicorn."""

from __future__ import annotations

import msgspec
from flask import Flask, Response, request


class Row(msgspec.Struct, forbid_unknown_fields=True, gc=False):
    """One transaction."""

    merchant: str
    amount: int | str
    id: str | None = None
    currency: str | None = None
    flow: str | None = None
    at: str | None = None
    category: str | None = None


class Batch(msgspec.Struct, forbid_unknown_fields=True, gc=False):
    """A request's body."""

    transactions: list[Row]


_decoder = msgspec.json.Decoder(Batch)


def create_app() -> Flask:
    """Make the application."""
    app = Flask(__name__)

    @app.post("/v1/batches")
    def post_batch() -> Response:
        rows = _decoder.decode(request.get_data(cache=False)).transactions
        answer = msgspec.json.encode({"accepted": len(rows), "duplicates": 0})
        return Response(answer, mimetype="application/json")

    return app
