"""What the web asks of the tallies: one short function per question, read top to bottom."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from service.batches.batch import Batch
from service.streams.record import Stream

Document = dict[str, Any]
"""A JSON-ready mapping, with the names of the API."""


class Unknown(LookupError):
    """What was asked for does not exist; ``args[0]`` says what does."""


class Unavailable(Exception):
    """The store cannot answer now; sending the same again later is safe.

    ``args[0]`` says what was and what was not applied; ``retry_after`` is in seconds.
    """

    retry_after: int = 1


class Conflict(Exception):
    """The request contradicts what is stored; ``args[0]`` says how."""


@dataclass(frozen=True)
class Posted:
    """Outcome of one batch.

    Attributes
    ----------
    accepted, duplicates, late, zero, unverified : int
        Rows, as in the API.
    alarms : list of Document
        Alarms raised by rows counted in this request.
    entries : list of Document
        One per stream touched (``reply=merchants``), or its full form (``reply=full``); else [].
    """

    accepted: int
    duplicates: int
    late: int
    zero: int
    unverified: int
    alarms: list[Document]
    entries: list[Document]


class Tallies:
    """The tallies of all tenants in one store."""

    durability: str
    """What a 200 means: ``none``, ``everysec``, ``always``."""

    def ident_key(self) -> tuple[int, int]:
        """Return the random key of identities (two 64-bit integers), kept in the store."""
        raise NotImplementedError

    def claim(self, tenant: str, idempotency_key: str, body_digest: str) -> None:
        """Remember the body of an Idempotency-Key; raise Conflict when it had another body."""
        raise NotImplementedError

    def post(self, tenant: str, batch: Batch, *, historic: bool, reply: str, now: int) -> Posted:
        """Count a batch exactly once and judge its streams. Raises Unavailable."""
        raise NotImplementedError

    def stream_of(
        self, tenant: str, merchant: str, flow: str, currency: str | None
    ) -> Stream:
        """Return the named stream, or the merchant's busiest one of a flow; raises Unknown."""
        raise NotImplementedError

    def detail(
        self, tenant: str, stream: Stream, *, measures: bool, now: int
    ) -> Document:
        """Return what GET /v1/merchants/{merchant} says."""
        raise NotImplementedError

    def digits(
        self, tenant: str, stream: Stream, view: str, span: str, *, now: int
    ) -> Document:
        """Return what GET /v1/merchants/{merchant}/digits says."""
        raise NotImplementedError

    def rows(self, tenant: str, stream: Stream) -> list[Document]:
        """Return the last rows kept, oldest first: id, amount, currency, at."""
        raise NotImplementedError

    def merchants(self, tenant: str) -> list[Document]:
        """Return the entries of all streams of a tenant, with ``category`` and ``updated``."""
        raise NotImplementedError

    def alarms(
        self, tenant: str, *, after: str | None, limit: int
    ) -> tuple[list[Document], str]:
        """Return alarms of the feed after a cursor, oldest first, and the last position read.

        Raises ValueError for a cursor that was never given out.
        """
        raise NotImplementedError

    def alarm(self, tenant: str, alarm_id: str) -> Document:
        """Return one alarm; raises Unknown."""
        raise NotImplementedError

    def policies(self, tenant: str) -> dict[str, Document]:
        """Return all policies by name; ``standard`` always exists."""
        raise NotImplementedError

    def put_policy(self, tenant: str, name: str, settings: Document) -> Document:
        """Store a policy (already checked by its schema) as a new version and return it."""
        raise NotImplementedError

    def assign(
        self, tenant: str, merchant: str, *, policy: str | None, category: str | None
    ) -> Document:
        """Assign a merchant's policy or category; raises Unknown for a policy that is not there."""
        raise NotImplementedError

    def checks(self) -> Sequence[Document]:
        """Return readiness checks: ``name``, ``status`` (pass, warn, fail), ``detail``."""
        raise NotImplementedError
