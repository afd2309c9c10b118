"""Who is asking, and may they: bearer keys, tenants and roles (RFC 6750)."""

from __future__ import annotations

from collections.abc import Callable
from functools import wraps
from http import HTTPStatus
from typing import Any, TypeVar, cast

from flask import g, request

from service.web.admission import admit
from service.web.keyring import ROLES, Principal
from service.web.parts import parts
from service.web.problems import Problem
from service.web.resource import documents

LONGEST_KEY = 512
SCHEME = "key"

View = TypeVar("View", bound=Callable[..., Any])


def requires(role: str) -> Callable[[View], View]:
    """Let a view be called only by keys with a role, and only by so many requests at a time.

    Stands directly under ``path``. The role, 401, 403 and 503 appear in the OpenAPI document too.
    """
    if role not in ROLES:
        raise ValueError(f"no role {role!r}; roles are {', '.join(ROLES)}")

    def note(doc: dict[str, Any]) -> None:
        manual = doc.setdefault("manual_doc", {})
        manual["security"] = [{SCHEME: [role]}]
        responses = manual.setdefault("responses", {})
        for status in (401, 403, 503):
            responses[status] = HTTPStatus(status).name

    def decorate(view: View) -> View:
        @wraps(view)
        def guarded(*args: Any, **kwargs: Any) -> Any:
            g.principal = _known(role)
            admit(parts().posting if role == "post" else parts().answering)
            return view(*args, **kwargs)

        return documents(note)(cast(View, guarded))

    return decorate


def principal() -> Principal:
    """Return whom the current request's key stands for."""
    return cast(Principal, g.principal)


def _known(role: str) -> Principal:
    scheme, _, key = request.headers.get("Authorization", "").partition(" ")
    key = key.strip()
    if scheme.lower() != "bearer" or not key:
        raise Problem(
            401,
            "Send a key: Authorization: Bearer <key>.",
            headers={"WWW-Authenticate": 'Bearer realm="tallyward"'},
        )
    found = parts().keyring.find(key) if len(key) <= LONGEST_KEY else None
    if found is None:
        raise Problem(
            401,
            "This key is not known.",
            headers={"WWW-Authenticate": 'Bearer realm="tallyward", error="invalid_token"'},
        )
    if role not in found.roles:
        raise Problem(
            403,
            f"This key lacks the role {role!r}.",
            headers={
                "WWW-Authenticate": f'Bearer realm="tallyward", error="insufficient_scope", '
                f'scope="{role}"'
            },
        )
    return found
