"""The OpenAPI 3.1 document: what the service promises, and every path with its role and errors."""

from __future__ import annotations

from http import HTTPStatus
from typing import Any

import flask_smorest
from flask import Flask

from schemas.problem import Problem
from service import __version__
from service.web.access import SCHEME

PROMISE = (
    "if, given everything earlier in the stream, the probability of each cell never exceeds its "
    "stated bound, the expected number of alarms in any n transactions is at most "
    "n ÷ transactions_per_false_alarm, restarts included. With a learned baseline this holds with "
    "the stated confidence per stream, for baseline rows that represent the stream's ordinary "
    "business."
)

DESCRIPTION = f"""\
Tallyward watches the digits of payment amounts, merchant by merchant, and raises an alarm when a
stream's digits leave their bounds.

**The promise:** *{PROMISE}* Price changes and promotions are real changes, not false alarms.
Alarms may come together.

**An alarm is a reason to look, never proof of fraud.** Honest merchants set price points, run
promotions and change what they sell; a misfit says that digits differ from a reference, not why.
Let a person review each alarm, with the underlying transactions at hand, before anything is decided
about a merchant or a cardholder; never let an alarm alone block, charge or end a relationship. Act
only on lawful grounds, under the local law and the rules of the card schemes that apply to you, and
give those concerned the hearing these require. Amounts and merchants can be personal data (a sole
trader is a person): data protection law may call for a legal basis, a limit on keeping them,
information to those concerned and safeguards around automated decisions.

**Words.** A *stream* is one merchant's one flow of money in one currency; everything is tallied and
tested per stream. A *view* is how an amount's digits are read, a *cell* one outcome of a view.
Times are RFC 3339 in UTC. Amounts are integers in minor units of the currency, or decimal strings
in major units (`"19.99"`); a JSON float is refused, since it is ambiguous. JSON objects reject
unknown fields, and so does the query string.

**Errors** are RFC 9457 problem details (`application/problem+json`). Inputs at fault are listed in
`errors`: a `pointer` (RFC 6901) into the body, or the name of a `parameter` or a `header`. At most
100 are listed; `error_count` is the total. After 429 and 503, wait `Retry-After` seconds and send
the same again: nothing is lost or doubled, provided that rows carry an identity.

**Access.** `Authorization: Bearer <key>`; a key belongs to one tenant and has roles: `post`
(batches), `read` (queries, checks), `decide` (alarm decisions), `tune` (policies, assignments),
`admin`. Each operation names the role that it needs. Every response bears `X-Request-Id`: the
caller's own, if it is 1 to 128 printable ASCII characters.
"""

_REASONS = {
    400: "The body is not readable JSON; the detail says line and column.",
    401: "No valid key.",
    403: "The key lacks the role.",
    404: "What was asked for does not exist.",
    408: "The body came too slowly; send it faster, or less.",
    409: "The request contradicts what is stored.",
    413: "The body is too large; the detail says the limit.",
    415: "The body is of a type or an encoding that this path does not take.",
    422: "Inputs are invalid; see errors.",
    429: "Too many at once; wait Retry-After seconds.",
    503: "Too much to do, or no store; wait Retry-After seconds and send the same again.",
}
_RETRY_AFTER = {
    "description": "Seconds to wait.",
    "schema": {"type": "integer", "minimum": 0},
}
_AUTHENTICATE = {"description": "RFC 6750 challenge.", "schema": {"type": "string"}}
_REQUEST_ID = {
    "description": "The request's id: the caller's, or a new one.",
    "schema": {"type": "string", "minLength": 1, "maxLength": 128},
}
_METHODS = ("get", "put", "post", "delete", "patch")


class Api(flask_smorest.Api):  # type: ignore[misc]
    """The API's document; errors are left to ``service.web.problems``."""

    ERROR_SCHEMA = Problem
    DEFAULT_ERROR_RESPONSE_NAME = "default"

    def __init__(self, app: Flask) -> None:
        app.config.update(
            API_TITLE="Tallyward",
            API_VERSION=__version__,
            OPENAPI_VERSION="3.1.0",
        )
        super().__init__(app, spec_kwargs={"info": {"description": DESCRIPTION}})
        self.spec.components.security_scheme(
            SCHEME,
            {
                "type": "http",
                "scheme": "bearer",
                "description": "A key. The list beside each use names the role that it needs.",
            },
        )
        self.spec.components.header("RequestId", _REQUEST_ID)

    def _register_error_handlers(self) -> None:
        """Leave errors to ``service.web.problems``."""

    def _register_responses(self) -> None:
        """Describe one problem per status, and the one for what nobody foresaw."""
        for status, reason in _REASONS.items():
            headers: dict[str, Any] = {}
            if status in (429, 503):
                headers["Retry-After"] = _RETRY_AFTER
            if status in (401, 403):
                headers["WWW-Authenticate"] = _AUTHENTICATE
            self.spec.components.response(
                HTTPStatus(status).name, _problem(reason, headers), lazy=True
            )
        self.spec.components.response(
            "default", _problem("Another error; a fault of the service is 500.", {}), lazy=True
        )

    def document(self) -> dict[str, Any]:
        """Return the finished document."""
        document: dict[str, Any] = self.spec.to_dict()
        marked = {"X-Request-Id": {"$ref": "#/components/headers/RequestId"}}
        for path in document["paths"].values():
            for method in _METHODS:
                if method in path:
                    _finish(path[method], marked)
        for response in document["components"]["responses"].values():
            response["headers"] = {**response.get("headers", {}), **marked}
        return document


def _problem(reason: str, headers: dict[str, Any]) -> dict[str, Any]:
    response: dict[str, Any] = {
        "description": reason,
        "content": {"application/problem+json": {"schema": Problem}},
    }
    if headers:
        response["headers"] = headers
    return response


def _finish(operation: dict[str, Any], marked: dict[str, Any]) -> None:
    for response in operation["responses"].values():
        if "$ref" not in response:
            response["headers"] = {**response.get("headers", {}), **marked}
    roles = [role for use in operation.get("security", []) for role in use[SCHEME]]
    needs = f"Needs a key with the role `{roles[0]}`." if roles else "Needs no key."
    operation["description"] = "\n\n".join(filter(None, [operation.get("description"), needs]))
