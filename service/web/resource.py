"""Blueprints by resource: strict parsing of what comes in, and one word for each thing documented.

Parsing raises the problems of ``service.web.problems``; unknown fields and parameters are refused.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from copy import deepcopy
from http import HTTPStatus
from typing import Any, NoReturn, TypeVar, cast

import flask_smorest
import marshmallow as ma
import msgspec
from flask import Request, Response
from flask_smorest.utils import deepupdate
from webargs.flaskparser import FlaskParser

from service.web.bodies import read_body, strict_json
from service.web.problems import Problem, faults, invalid

View = TypeVar("View", bound=Callable[..., Any])


class StrictParser(FlaskParser):
    """Parses bodies and parameters by schema; every refusal is a Problem."""

    DEFAULT_UNKNOWN_BY_LOCATION = {  # noqa: RUF012 (webargs declares it so)
        **FlaskParser.DEFAULT_UNKNOWN_BY_LOCATION,
        "query": ma.RAISE,
        "querystring": ma.RAISE,
    }

    def load_json(self, req: Request, schema: ma.Schema) -> Any:
        """Return the body of an ``application/json`` request; 415 for another type."""
        if req.mimetype != "application/json":
            raise Problem(415, "Send the body as application/json.")
        if req.headers.get("Content-Encoding", "identity").strip().lower() != "identity":
            raise Problem(415, "This path takes no Content-Encoding.")
        return strict_json(read_body())

    def load_querystring(self, req: Request, schema: ma.Schema) -> Any:
        """Return the query parameters; one given twice is refused, as it is ambiguous."""
        twice = [name for name, values in req.args.lists() if len(values) > 1]
        if twice:
            raise invalid([{"parameter": n, "detail": "Given more than once."} for n in twice])
        return req.args.to_dict()

    def handle_error(self, error: ma.ValidationError, *args: Any, **kwargs: Any) -> NoReturn:
        """Turn marshmallow's messages into a 422."""
        found: list[dict[str, str]] = []
        for location, messages in cast(Mapping[str, Any], error.messages).items():
            for pointer, detail in faults(messages):
                if location == "json":
                    found.append({"pointer": pointer, "detail": detail})
                else:
                    detail = detail.replace("Unknown field", "Unknown parameter")
                    found.append({"parameter": pointer.lstrip("/"), "detail": detail})
        raise invalid(found)


class Resource(flask_smorest.Blueprint):  # type: ignore[misc]
    """A blueprint whose decorators are typed and whose operations are named by their function."""

    ARGUMENTS_PARSER = StrictParser()

    def path(
        self, rule: str, method: str = "GET", parameters: list[dict[str, Any]] | None = None
    ) -> Callable[[View], View]:
        """Serve one method of one path."""

        def decorate(view: View) -> View:
            self.add_url_rule(rule, view.__name__, view, methods=[method], parameters=parameters)
            named = self._docs[view.__name__][method.lower()].setdefault("manual_doc", {})
            named["operationId"] = view.__name__
            return view

        return decorate

    def takes(self, schema: type[ma.Schema], **kwargs: Any) -> Callable[[View], View]:
        """Hand the JSON body to the view, checked by a schema."""
        return cast(Callable[[View], View], self.arguments(schema, **kwargs))

    def asks(self, schema: type[ma.Schema]) -> Callable[[View], View]:
        """Hand the query parameters to the view, checked by a schema."""
        return cast(Callable[[View], View], self.arguments(schema, location="query"))

    def query(self, schema: type[ma.Schema]) -> dict[str, Any]:
        """Return the current request's query parameters, for views that read them themselves."""
        return cast(dict[str, Any], self.ARGUMENTS_PARSER.parse(schema(), location="query"))

    def answers(
        self, schema: type[ma.Schema], description: str, status: int = 200, **kwargs: Any
    ) -> Callable[[View], View]:
        """Document a response."""
        kwargs["description"] = description
        return documents(
            lambda doc: (
                doc.setdefault("response", {})
                .setdefault("responses", {})
                .setdefault(status, [])
                .append({"schema": schema, "content_type": None, **kwargs})
            )
        )

    def answers_text(self, content_type: str, description: str) -> Callable[[View], View]:
        """Document a response that is plain text of some type."""
        return self.answers_raw(content_type, {"type": "string"}, description)

    def answers_raw(
        self, content_type: str, schema: dict[str, Any], description: str
    ) -> Callable[[View], View]:
        """Document a response by a JSON Schema of its own, beside any that is there."""
        content = {content_type: {"schema": schema}}
        responses = {200: {"description": description, "content": content}}
        return documents(lambda doc: deepupdate(doc, {"manual_doc": {"responses": responses}}))

    def fails(self, *statuses: int) -> Callable[[View], View]:
        """Document problems that the view answers with."""

        def add(doc: dict[str, Any]) -> None:
            responses = doc.setdefault("manual_doc", {}).setdefault("responses", {})
            for status in statuses:
                responses[status] = HTTPStatus(status).name

        return documents(add)


def documents(add: Callable[[dict[str, Any]], object]) -> Callable[[View], View]:
    """Return a decorator that adds to a view's OpenAPI notes and costs nothing when serving."""

    def decorate(view: View) -> View:
        notes = deepcopy(getattr(view, "_apidoc", {}))
        add(notes)
        view.__dict__["_apidoc"] = notes
        return view

    return decorate


def reply(document: Any, status: int = 200, headers: Mapping[str, str] | None = None) -> Response:
    """Return a JSON response, in RFC 8259 with floats that round-trip."""
    response = Response(msgspec.json.encode(document), status, mimetype="application/json")
    if headers:
        response.headers.update(headers)
    return response


def path_parameter(name: str, description: str, pattern: str) -> dict[str, Any]:
    """Return the OpenAPI notes of a path parameter."""
    schema = {"type": "string", "pattern": f"^(?:{pattern})$"}
    return {"in": "path", "name": name, "description": description, "schema": schema}
