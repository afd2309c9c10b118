"""What the views work with, hung on the app once by ``create_app``."""

from __future__ import annotations

import threading
from dataclasses import dataclass
from typing import cast

from flask import current_app

from service.batches.limits import Defaults, Limits
from service.settings import Settings
from service.tallies import Tallies
from service.web.admission import Admission
from service.web.keyring import Keyring, keyring


@dataclass(frozen=True)
class Parts:
    """The settings, the tallies and the keys of one app.

    Attributes
    ----------
    seats : BoundedSemaphore
        One for each request that may wait for an alarm: half of the threads that answer.
    posting, answering : Admission
        Whom the threads serve: posts of batches, and all else that may take a while. Each has
        threads of its own, so that neither starves the other, and health never waits for either.
    limits, defaults
        What a batch may hold, and what its rows mean where they leave a field out.
    """

    settings: Settings
    tallies: Tallies
    keyring: Keyring
    seats: threading.BoundedSemaphore
    posting: Admission
    answering: Admission
    limits: Limits
    defaults: Defaults


def parts() -> Parts:
    """Return the current app's parts."""
    return cast(Parts, current_app.extensions["tallyward"])


def tallies() -> Tallies:
    """Return the current app's tallies."""
    return parts().tallies


def assemble(settings: Settings, tallies: Tallies) -> Parts:
    """Return the parts of a new app."""
    seats = threading.BoundedSemaphore(max(1, settings.threads // 2))
    waiting, seconds = settings.max_waiting, settings.queue_timeout
    limits = Limits(
        max_rows=settings.max_rows,
        max_body=settings.max_body,
        max_expanded=settings.max_expanded,
        max_streams=settings.max_streams,
        horizon_ms=settings.horizon_days * 24 * 3600 * 1000,
    )
    defaults = Defaults(currency=settings.currency)
    return Parts(
        settings,
        tallies,
        keyring(settings.admin_key),
        seats,
        Admission(settings.max_posting, waiting, seconds),
        Admission(settings.threads, waiting, seconds),
        limits,
        defaults,
    )
