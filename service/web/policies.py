"""Policies: what a tenant asks of the detectors."""

from __future__ import annotations

from typing import Any

from flask import Response

from schemas.policy import Policies, Policy, PolicySettings
from schemas.words import POLICY
from service.web.access import principal, requires
from service.web.parts import tallies
from service.web.problems import Problem, invalid
from service.web.resource import Resource, path_parameter, reply

policies = Resource("policies", __name__, description="What a tenant asks of the detectors.")

NAME = path_parameter("name", "The policy's name.", POLICY.pattern)


@policies.path("/v1/policies")
@requires("read")
@policies.answers(Policies, "All policies, by name.")
@policies.fails(503)
def list_policies() -> Response:
    """List all policies. `standard` always exists."""
    found = tallies().policies(principal().tenant)
    return reply({"policies": [found[name] for name in sorted(found)]})


@policies.path("/v1/policies/<name>", parameters=[NAME])
@requires("read")
@policies.answers(Policy, "The policy in force.")
@policies.fails(404, 503)
def get_policy(name: str) -> Response:
    """Show one policy."""
    found = tallies().policies(principal().tenant).get(name)
    if found is None:
        raise Problem(404, "There is no policy of this name.")
    return reply(found)


@policies.path("/v1/policies/<name>", "PUT", parameters=[NAME])
@requires("tune")
@policies.takes(PolicySettings)
@policies.answers(Policy, "The policy as it is from now on.")
@policies.fails(400, 408, 413, 415, 422, 503)
def put_policy(settings: dict[str, Any], name: str) -> Response:
    """Make or replace a policy.

    The body replaces the policy as a whole: what it leaves out takes its default. Rows that arrive
    a second later or more are judged by the new version, whichever worker takes them.
    """
    if POLICY.fullmatch(name) is None:
        expected = "Expected 1 to 32 characters of a-z 0-9 _ -."
        raise invalid([{"parameter": "name", "detail": expected}])
    return reply(tallies().put_policy(principal().tenant, name, settings))
