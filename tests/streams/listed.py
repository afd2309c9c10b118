"""Entries of folded streams, their rules put right first, as whoever loads a stream does."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from service.detection.policy import Policy
from service.streams.entries import entries, evidence
from service.streams.folded import Folded
from service.streams.record import Stream
from service.streams.rules import Kind, put_right


def in_force(folded: Folded, policies: Mapping[int, Policy]) -> np.ndarray:
    """Put the policies into force and return all slots."""
    slots = np.arange(len(folded.state))
    put_right(folded.state, slots, folded.rules, policies, [Kind("sale", "EUR")] * len(slots))
    return slots


def listed(
    folded: Folded, streams: Sequence[Stream], policies: Mapping[int, Policy], now: int
) -> list[dict[str, Any]]:
    return entries(folded, in_force(folded, policies), streams, now)


def evidence_of(folded: Folded, policies: Mapping[int, Policy]) -> np.ndarray:
    return evidence(folded, in_force(folded, policies))
