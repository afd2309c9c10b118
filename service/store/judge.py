"""From logs to verdicts: load, fold, compact what is due, publish what crossed."""

from __future__ import annotations

import logging
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
import redis
from redis.exceptions import RedisError

from service.digits.significand import IntArray
from service.store.catalogue import Catalogue
from service.store.feed import Feed, Outgoing
from service.store.keys import stream_of
from service.store.loading import load
from service.store.logs import COMPACT_ROWS, Appended, Blobs, Logs, Place
from service.store.warm import Warm
from service.streams.crossing import Crossing
from service.streams.fold import fold
from service.streams.folded import Folded
from service.streams.record import Records, Stream
from service.streams.rules import Kind, put_right
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
    slots : int64 array
        Of the streams in ``folded``.
    crossings : list of Crossing
        By slot of ``folded``, those of other calls' rows included.
    """

    index: list[int]
    streams: list[Stream]
    folded: Folded
    slots: IntArray
    crossings: list[Crossing]


class Judge:
    """Folds streams and makes known what follows."""

    def __init__(self, client: redis.Redis, logs: Logs, feed: Feed, catalogue: Catalogue) -> None:
        self.client = client
        self.logs = logs
        self.feed = feed
        self.catalogue = catalogue

    def judge(self, tenant: str, blobs: Sequence[Blobs]) -> Judged:
        """Fold streams of one tenant as read; compact and publish what is due.

        A stream that cannot be folded is put in quarantine and left out, and does not keep the
        others from being judged.
        """
        index = list(range(len(blobs)))
        try:
            judged, tail = self._judged(tenant, blobs, index)
        except RedisError:
            raise
        except Exception:  # whatever is wrong with one stream is no matter of the others
            index = self._healthy(tenant, blobs, index)
            judged, tail = self._judged(tenant, blobs, index)
        self._settle(tenant, judged, lambda i: blobs[index[i]], tail)
        return judged

    def go_on(
        self, tenant: str, warm: Warm, slots: IntArray, streams: list[Stream], appended: Appended
    ) -> Judged:
        """Fold what an append left unfolded in kept states; compact and publish what is due.

        Parameters
        ----------
        slots : int64 array
            Of the batch's streams in ``warm``.
        """
        folded = warm.folded
        warm.drop(slots)
        try:
            records, slot = _unfolded(folded, slots, appended)
            crossings = self._fold(tenant, folded, slots, records, slot, warm.kinds, warm.names)
        except RedisError:
            raise
        except Exception:  # one of them cannot be folded; which one, the slow way finds out
            return self.judge(tenant, self.logs.read(self.logs.located(tenant, streams)))
        judged = Judged(list(range(len(streams))), streams, folded, slots, crossings)

        def place(i: int) -> Place:
            home, name = self.logs.partition(tenant, streams[i].merchant), warm.names[slots[i]]
            generation, incarnation = int(appended.generation[i]), int(appended.incarnation[i])
            version = generation.to_bytes(4, "little") + incarnation.to_bytes(8, "little")
            last = records[np.flatnonzero(np.equal(slot, slots[i]))[-1]].tobytes()
            return Place(name.decode(), home, version, last)

        moved = np.zeros(warm.room, bool)  # of the others the last record is not at hand
        moved[slot] = True
        tail = np.where(moved[slots], folded.state["records"][slots] - appended.folded, 0)
        compacted = self._settle(tenant, judged, place, tail)
        warm.keep(slots, appended, compacted)  # not before its crossings are put down
        return judged

    def _judged(
        self, tenant: str, blobs: Sequence[Blobs], index: list[int]
    ) -> tuple[Judged, IntArray]:
        """Return streams as read and folded, and how many records their snapshots lack."""
        chosen = [blobs[i] for i in index]
        streams = [stream_of(b.path)[1] for b in chosen]
        loaded = load(chosen)
        crossings = self._fold(
            tenant,
            loaded.folded,
            loaded.slots,
            loaded.records,
            loaded.slot,
            [Kind(s.flow, s.currency) for s in streams],
            [b.path.encode() for b in chosen],
        )
        tail = loaded.folded.state["records"] - loaded.tail_from
        return Judged(index, streams, loaded.folded, loaded.slots, crossings), tail

    def _fold(
        self,
        tenant: str,
        folded: Folded,
        slots: IntArray,
        records: Records,
        slot: IntArray,
        kinds: Sequence[Kind],
        names: Sequence[bytes],
    ) -> list[Crossing]:
        policies = self.catalogue.of(tenant).by_version
        named = {*records["policy"].tolist(), *folded.state["policy"][slots].tolist()} - {0}
        if not named <= policies.keys():
            policies = self.catalogue.of(tenant, fresh=True).by_version
        put_right(folded.state, slots, folded.rules, policies, kinds)
        return fold(folded, records, slot, policies, kinds, names)

    def _healthy(self, tenant: str, blobs: Sequence[Blobs], index: list[int]) -> list[int]:
        """Find streams that cannot be folded by halving; quarantine them, return the others."""
        try:
            self._judged(tenant, blobs, index)
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
        self,
        tenant: str,
        judged: Judged,
        place: Callable[[int], Place | Blobs],
        tail: IntArray,
    ) -> list[int]:
        """Compact streams with a crossing or a long tail, then publish the crossings.

        Returns the positions of those that were compacted.

        Parameters
        ----------
        place : function
            Tells where a stream, by its position in ``judged``, is in the store.
        tail : int64 array
            Records that the stored snapshots lack.
        """
        due = np.flatnonzero(tail >= COMPACT_ROWS).tolist()
        outgoing: dict[int, list[Outgoing]] = {}
        if judged.crossings:
            position = {slot: i for i, slot in enumerate(judged.slots.tolist())}
            last = {c.slot: c.ordinal for c in judged.crossings}
            for c in judged.crossings:
                mine = outgoing.setdefault(position[c.slot], [])
                # of an alarm that crossed often only the latest crossing is told
                if c.ordinal < FEW_CROSSINGS or c.live or c.ordinal == last[c.slot]:
                    mine.append(Outgoing.of(place(position[c.slot]).path, c))
            due = sorted(outgoing.keys() | due)
        if not due:
            return []
        slots, places = judged.slots[due], [place(i) for i in due]
        won = self.logs.compact(
            places,
            write_snapshots(judged.folded, slots),
            judged.folded.state["records"][slots].tolist(),
            [{o.field: o.boxed() for o in outgoing.get(i, ())} for i in due],
        )
        # A crossing whose stream another worker compacted first is told by whoever folds what that
        # one left: it may have read fewer rows than we did.
        lost = [at for i, at, ok in zip(due, places, won, strict=True) if i in outgoing and not ok]
        if lost:
            self.judge(tenant, self.logs.read([(at.partition, at.path) for at in lost]))
        for partition in {places[k].partition for k, i in enumerate(due) if i in outgoing}:
            self.feed.empty(partition)
        return [i for i, ok in zip(due, won, strict=True) if ok]


def _unfolded(folded: Folded, slots: IntArray, appended: Appended) -> tuple[Records, IntArray]:
    """Bring slots to where an append's records go on; return all records to be folded."""
    state, start = folded.state, appended.start
    new = np.flatnonzero(start == 0)
    if new.size:
        folded.forget(slots[new])
        state["incarnation"][slots[new]] = appended.incarnation[new]
    assert np.all((state["records"][slots] == start) | (start < 0))
    records, slot = appended.records, slots[appended.slot]
    if appended.cold:
        cold = np.fromiter(appended.cold, np.int64, len(appended.cold))
        loaded = load(list(appended.cold.values()), folded, slots[cold])
        records = np.concatenate([records, loaded.records])
        slot = np.concatenate([slot, loaded.slot])
    return records, slot
