"""From logs to verdicts: load, fold, compact what is due, publish what crossed."""

from __future__ import annotations

import logging
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import redis
from redis.exceptions import RedisError

from service.store.catalogue import Catalogue
from service.store.feed import Feed, Outgoing
from service.store.keys import stream_of
from service.store.loading import Loaded, load
from service.store.logs import COMPACT_ROWS, Blobs, Logs
from service.streams.crossing import Crossing
from service.streams.fold import fold
from service.streams.folded import Folded
from service.streams.record import Stream
from service.streams.rules import Kind
from service.streams.snapshots import write_snapshots
from service.streams.walk import FEW_CROSSINGS

log = logging.getLogger(__name__)


@dataclass(frozen=True)
class Judged:
    """Streams folded up to the last record read.

    Attributes
    ----------
    index : list of int
        Which of the streams asked for these are; quarantined ones are left out.
    streams : list of Stream
    folded : Folded
    crossings : list of Crossing
        By slot of ``folded``, those of other calls' rows included.
    """

    index: list[int]
    streams: list[Stream]
    folded: Folded
    crossings: list[Crossing]


class Judge:
    """Folds streams and makes known what follows."""

    def __init__(self, client: redis.Redis, logs: Logs, feed: Feed, catalogue: Catalogue) -> None:
        self.client = client
        self.logs = logs
        self.feed = feed
        self.catalogue = catalogue

    def judge(self, tenant: str, blobs: Sequence[Blobs]) -> Judged:
        """Fold streams of one tenant; compact and publish what is due.

        A stream that cannot be folded is put in quarantine and left out, and does not keep the
        others from being judged.
        """
        index = list(range(len(blobs)))
        try:
            loaded, crossings = self._fold(tenant, blobs)
        except RedisError:
            raise
        except Exception:  # whatever is wrong with one stream is no matter of the others
            index = self._healthy(tenant, blobs, index)
            blobs = [blobs[i] for i in index]
            loaded, crossings = self._fold(tenant, blobs)
        self._settle(tenant, blobs, loaded, crossings)
        streams = [stream_of(b.path)[1] for b in blobs]
        return Judged(index, streams, loaded.folded, crossings)

    def _fold(self, tenant: str, blobs: Sequence[Blobs]) -> tuple[Loaded, list[Crossing]]:
        loaded = load(blobs)
        policies = self.catalogue.of(tenant).by_version
        named = set(np.unique(loaded.records["policy"]).tolist())
        named |= set(np.unique(loaded.folded.state["policy"]).tolist()) - {0}
        if not named <= policies.keys():
            policies = self.catalogue.of(tenant, fresh=True).by_version
        crossings = fold(
            loaded.folded,
            loaded.records,
            loaded.slot,
            policies,
            [Kind(s.flow, s.currency) for _, s in map(stream_of, (b.path for b in blobs))],
            [b.path.encode() for b in blobs],
        )
        return loaded, crossings

    def _healthy(self, tenant: str, blobs: Sequence[Blobs], index: list[int]) -> list[int]:
        """Find streams that cannot be folded by halving; quarantine them, return the others."""
        try:
            self._fold(tenant, [blobs[i] for i in index])
        except RedisError:
            raise
        except Exception as error:
            if len(index) > 1:
                half = len(index) // 2
                parts = index[:half], index[half:]
                return [i for part in parts for i in self._healthy(tenant, blobs, part)]
            log.error("a stream cannot be folded and is in quarantine: %s", error)
            blob = blobs[index[0]]
            reason = f"{type(error).__name__}: {error}"
            self.client.hset(blob.partition.quarantine, blob.path, reason)
            return []
        return index

    def _settle(
        self, tenant: str, blobs: Sequence[Blobs], loaded: Loaded, crossings: Sequence[Crossing]
    ) -> None:
        """Compact streams with a crossing or a long tail, then publish the crossings."""
        tail = np.bincount(loaded.slot, minlength=len(blobs))
        crossed = {c.slot for c in crossings}
        due = sorted(crossed | set(np.flatnonzero(tail >= COMPACT_ROWS).tolist()))
        if not due:
            return
        outgoing: dict[int, list[Outgoing]] = {slot: [] for slot in due}
        last = {c.slot: c.ordinal for c in crossings}
        for c in crossings:
            # of an alarm that crossed often only the latest crossing is told
            if c.ordinal < FEW_CROSSINGS or c.live or c.ordinal == last[c.slot]:
                outgoing[c.slot].append(Outgoing.of(blobs[c.slot].path, c))
        won = self.logs.compact(
            [blobs[i] for i in due],
            write_snapshots(loaded.folded, due),
            loaded.folded.state["records"][due].tolist(),
            [{o.field: o.boxed() for o in outgoing[i]} for i in due],
        )
        by_partition: dict[int, list[Outgoing]] = {}
        for slot, ok in zip(due, won, strict=True):
            if ok and outgoing[slot]:
                by_partition.setdefault(blobs[slot].partition.number, []).extend(outgoing[slot])
        for number, mine in by_partition.items():
            self.feed.publish(self.logs.partitions[number], mine)
        self._crossed_elsewhere(
            tenant, [blobs[i] for i, ok in zip(due, won, strict=True) if outgoing[i] and not ok]
        )

    def _crossed_elsewhere(self, tenant: str, lost: Sequence[Blobs]) -> None:
        """See to crossings whose streams another worker compacted first.

        It may have read fewer rows than we did, or not have published yet.
        """
        if not lost:
            return
        self.judge(tenant, self.logs.read([(b.partition, b.path) for b in lost]))
        for partition in {b.partition for b in lost}:
            self.feed.publish(partition, self.feed.left(partition))
