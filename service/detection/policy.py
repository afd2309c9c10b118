"""A policy: what a tenant asks of the detectors, frozen under a version number."""

from __future__ import annotations

import math
from dataclasses import asdict, dataclass, fields
from typing import Any

from service.digits.views import WATCHED_VIEWS

QUIET_FLOWS = ("authorisation", "chargeback", "test")
"""Flows that are tallied but raise no alarms unless a policy names them."""

LEADING_TOLERANCE = 0.10
TAIL_TOLERANCE = 0.05


@dataclass(frozen=True)
class Limit:
    """A review limit: amounts just below it are watched as a cell of their own.

    Attributes
    ----------
    currency : str
    amount : int
        Minor units; amounts from this on are reviewed.
    margin : float
        Share of the limit below it that counts as just below, 0 to 1.
    """

    currency: str
    amount: int
    margin: float = 0.1

    @property
    def lowest(self) -> int:
        """Return the smallest amount that is just below the limit, in minor units."""
        return math.ceil(self.amount * (1 - self.margin))


@dataclass(frozen=True)
class Policy:
    """Settings of one version of a policy, in the names of the API.

    Attributes
    ----------
    version : int
        1 to 65 535, unique within the tenant; every log record carries the version in force.
    tolerance : float or None
        Share by which a cell may exceed its reference before that counts as a difference. None:
        0.10 for leading views and 0.05 for the tail pair; a number serves the leading views and
        half of it the tail pair.
    flows : tuple of str or None
        Flows that may raise alarms; None for all but ``QUIET_FLOWS``.
    limits : tuple of Limit
        At most four for one currency.
    """

    name: str = "standard"
    version: int = 1
    reference: str = "auto"
    tolerance: float | None = None
    transactions_per_false_alarm: float = 1_000_000
    baseline_size: int = 1000
    baseline_days: float = 14
    baseline_confidence: float = 0.9995
    minimum_count: int = 200
    views: tuple[str, ...] = WATCHED_VIEWS
    flows: tuple[str, ...] | None = None
    limits: tuple[Limit, ...] = ()

    @classmethod
    def from_document(cls, document: dict[str, Any]) -> Policy:
        """Read a stored document; fields that this version does not know are left out."""
        known = {f.name for f in fields(cls)}
        values = {k: v for k, v in document.items() if k in known}
        for name in ("views", "flows"):
            if values.get(name) is not None:
                values[name] = tuple(values[name])
        values["limits"] = tuple(Limit(**limit) for limit in values.get("limits") or ())
        return cls(**values)

    def document(self) -> dict[str, Any]:
        """Return the policy as a JSON-ready mapping."""
        return asdict(self)

    def watches(self, flow: str) -> bool:
        """Return whether a flow's streams may raise alarms."""
        return flow not in QUIET_FLOWS if self.flows is None else flow in self.flows

    def limits_in(self, currency: str) -> tuple[Limit, ...]:
        """Return the review limits for one currency."""
        return tuple(limit for limit in self.limits if limit.currency == currency)

    def tolerances(self) -> tuple[float, float, float]:
        """Return the tolerance of lead digit, lead pair and tail pair."""
        if self.tolerance is None:
            return LEADING_TOLERANCE, LEADING_TOLERANCE, TAIL_TOLERANCE
        return self.tolerance, self.tolerance, self.tolerance / 2
