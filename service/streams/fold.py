"""fold(state, log) -> state, crossings: the only way a stream's state comes about.

All streams are folded together, in passes. A pass takes from every stream the rows up to its next
*event* (the policy changes, the baseline completes, the evidence crosses its threshold), evaluates
every detector after every row, applies what was taken, handles the events, and goes on.
"""

from __future__ import annotations

import hashlib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from service.detection.policy import Policy
from service.digits.significand import IntArray
from service.digits.views import CELLS
from service.streams.findings import Finding, findings
from service.streams.learning import decide, learn, until_complete
from service.streams.record import Records
from service.streams.rows import Rows, columns
from service.streams.rules import Rules, adopt, refresh
from service.streams.running import Running, evaluate
from service.streams.state import REFUTED_BY_BANK, UNDECIDED, Folded, States, restart
from service.streams.window import tally

PASS_ROWS = 256
"""Most rows of one stream in one pass, so that a crossing costs little work done twice."""


@dataclass(frozen=True)
class Crossing:
    """The evidence of a stream reached its threshold.

    Attributes
    ----------
    slot : int
    alarm : bytes
        Id of the alarm that this crossing raised or that absorbed it.
    ordinal : int
        0 for the crossing that raised the alarm, then 1, 2, ... .
    record : int
        Row number of the record in the log.
    rows : int
        The stream's rows with an amount, this one included.
    arrived, at : int
        Times of the row, ms since 1970 UTC.
    historic : bool
    evidence : float
        log10 of the weighted sum of the detectors.
    threshold : float
        Transactions per false alarm.
    severity : float
        Log-likelihood gathered since onset, over all crossings of the alarm.
    findings : list of Finding
        Strongest first.
    """

    slot: int
    alarm: bytes
    ordinal: int
    record: int
    rows: int
    arrived: int
    at: int
    historic: bool
    evidence: float
    threshold: float
    severity: float
    findings: list[Finding] = field(default_factory=list)


def fold(
    folded: Folded,
    records: Records,
    slot: IntArray,
    policies: Mapping[int, Policy],
    flows: Sequence[str],
    names: Sequence[bytes],
) -> list[Crossing]:
    """Fold log records into the states, in place, and return the crossings in order.

    Parameters
    ----------
    folded : Folded
        States of n streams; ``state["records"]`` records were folded before.
    records : array (m,) of ``RECORD``
        The logs' records not yet folded, each stream's in log order.
    slot : int64 array (m,)
        Stream of each record, ascending.
    policies : mapping
        Every policy version that the records name.
    flows : sequence of str, length n
        Flow of each stream.
    names : sequence of bytes, length n
        A name of each stream that no other stream of any tenant bears; enters alarm ids.

    Raises
    ------
    KeyError
        If a policy version is missing.
    """
    if not len(records):
        return []
    state = folded.state
    rows = columns(state, records, slot)
    tally(folded, rows)
    rows = rows.take(np.flatnonzero(rows.amount > 0))
    rules = Rules.empty(len(state))
    fresh = np.unique(rows.slot)
    adopt(state, fresh, state["policy"][fresh], rules, policies, flows)
    start = np.searchsorted(rows.slot, np.arange(len(state)))
    end = np.searchsorted(rows.slot, np.arange(len(state)), side="right")
    crossings: list[Crossing] = []
    while True:
        left = np.flatnonzero(start < end)
        if not left.size:
            break
        first_policy = rows.policy[start[left]]
        changed = state["policy"][left] != first_policy
        if changed.any():
            adopt(state, left[changed], first_policy[changed], rules, policies, flows)
        taken = _take(rows, left, start, end)
        part = rows.take(taken)
        part, complete = until_complete(state, rules, part)
        path = evaluate(state, rules, part)
        crossed, consumed = _until_crossed(rules, part, path)
        _apply(folded, rules, part, path, consumed)
        start += np.bincount(part.slot[consumed], minlength=len(state))
        for i in crossed.tolist():
            crossing = _cross(state, rules, part, path, i, names)
            if crossing is not None:
                crossings.append(crossing)
        done = complete[np.isin(complete, np.flatnonzero(consumed))]
        for i in done.tolist():
            s = int(part.slot[i])
            version = int(state["policy"][s])
            decide(folded, s, policies[version], int(part.at[i]))
            refresh(state, np.array([s]), rules, policies[version], flows)
    crossings.sort(key=lambda c: (c.slot, c.record))
    return crossings


def _take(rows: Rows, left: IntArray, start: IntArray, end: IntArray) -> IntArray:
    """Choose the rows of a pass: per stream, up to the next policy change or ``PASS_ROWS``."""
    length = np.minimum(end[left] - start[left], PASS_ROWS)
    offset = np.repeat(start[left] - np.concatenate([[0], np.cumsum(length)[:-1]]), length)
    chosen = np.arange(int(length.sum())) + offset
    same = rows.policy[chosen] == np.repeat(rows.policy[start[left]], length)
    if not same.all():
        begin = np.repeat(np.cumsum(length) - length, length)
        so_far = np.concatenate([[0], np.cumsum(~same)])
        chosen = chosen[so_far[1:] - so_far[begin] == 0]
    return np.asarray(chosen)


def _until_crossed(
    rules: Rules, part: Rows, path: Running
) -> tuple[IntArray, npt.NDArray[np.bool_]]:
    """Return the first crossing row of each stream, and which rows come no later than it."""
    first = np.searchsorted(part.slot, part.slot)
    over = (path.total >= rules.threshold[part.slot]) & rules.watching[part.slot]
    if not over.any():
        return np.empty(0, np.int64), np.ones(len(part.slot), bool)
    over_before: IntArray = np.cumsum(over) - over
    consumed: npt.NDArray[np.bool_] = over_before == over_before[first]
    return np.flatnonzero(over & consumed), consumed


def _apply(
    folded: Folded,
    rules: Rules,
    part: Rows,
    path: Running,
    consumed: npt.NDArray[np.bool_],
) -> None:
    """Write what the consumed rows did to the states."""
    state = folded.state
    rows = np.flatnonzero(consumed)
    slot = part.slot[rows]
    last = rows[np.concatenate([slot[1:] != slot[:-1], [True]])]
    streams = part.slot[last]
    rank = np.arange(len(part.slot)) - np.searchsorted(part.slot, part.slot)
    number = state["rows"][part.slot] + rank + 1
    rest = path.shape_rest[:, last].T
    rested = rest >= 0
    state["shape_onset"][streams] = np.where(
        rested, number[rest] + 1, state["shape_onset"][streams]
    )
    state["shape_onset_at"][streams] = np.where(
        rested, part.at[rest], state["shape_onset_at"][streams]
    )
    state["sums"][streams] = path.sums[:, last].T.reshape(-1, 3, 3)
    state["shape"][streams] = path.shape[:, last].T
    state["shape_cusum"][streams] = path.shape_cusum[:, last].T

    used = consumed[path.hit_row]
    key = path.hit_key
    stays = np.concatenate([key[1:] == key[:-1], [False]]) if len(key) else np.empty(0, bool)
    follows = np.concatenate([used[1:], [False]]) if len(key) else np.empty(0, bool)
    final = np.flatnonzero(used & ~(stays & follows))
    at = key[final] // CELLS, key[final] % CELLS
    begin = path.run_start[final]
    carried = path.run_carried[final]
    amount = part.amount[path.hit_row]
    so_far = np.cumsum(amount)  # may wrap around; differences within a pass do not
    state["value"][at] = path.value[:, final].T
    state["hit"][at] = path.clock[final]
    state["cusum"][at] = path.cusum[final]
    state["run"][at] = np.where(carried, state["run"][at], 0) + final - begin + 1
    state["spent"][at] = (
        np.where(carried, state["spent"][at], 0) + so_far[final] - so_far[begin] + amount[begin]
    )
    state["onset"][at] = np.where(carried, state["onset"][at], number[path.hit_row[begin]])
    state["onset_clock"][at] = np.where(carried, state["onset_clock"][at], path.clock[begin])
    state["onset_at"][at] = np.where(carried, state["onset_at"][at], part.at[path.hit_row[begin]])

    counts = state["count"]
    np.add.at(counts, (key[used] // CELLS, key[used] % CELLS), 1)
    n = len(state)
    per_stream = np.bincount(slot, minlength=n)
    clock = np.stack(
        [np.bincount(slot[part.cell[v, rows] >= 0], minlength=n) for v in range(3)], axis=1
    )
    waves = part.wave[:, rows]
    starts = np.flatnonzero(np.concatenate([[True], slot[1:] != slot[:-1]]))
    state["circle"][streams] += np.add.reduceat(waves, starts, axis=1).T
    learn(folded, part, rows, streams, starts)
    state["rows"] += per_stream
    state["clock"] += clock


def _cross(
    state: States, rules: Rules, part: Rows, path: Running, i: int, names: Sequence[bytes]
) -> Crossing | None:
    """Handle a crossing: refute the law while learning, else raise an alarm or add to it."""
    s = int(part.slot[i])
    learning = bool(np.any(state["reference"][s] == UNDECIDED))
    if learning:
        sums = state["sums"][s].sum(axis=1) * rules.active[s]
        sums[1] += float((state["shape"][s] * rules.shapes[s]).sum())
        strongest = int(np.argmax(sums))
        state["refuted"][s, strongest] |= REFUTED_BY_BANK
        rules.active[s, strongest] = 0
        if strongest == 1:
            rules.shapes[s] = 0
        restart(state, s, int(part.at[i]))
        return None
    found = findings(state[s], rules.tolerance[s], rules.active[s], rules.shapes[s])
    severity = max((f.severity for f in found), default=0.0)
    number = int(part.number[i])
    raised = not bytes(state["alarm"][s])
    if raised:
        state["alarm"][s] = _alarm_id(names[s], int(state["incarnation"][s]), number, part.raw[i])
        state["alarm_crossings"][s] = 0
        state["alarm_severity"][s] = 0.0
    ordinal = int(state["alarm_crossings"][s])
    state["alarm_crossings"][s] = ordinal + 1
    state["alarm_severity"][s] += severity
    crossing = Crossing(
        slot=s,
        alarm=bytes(state["alarm"][s]).ljust(16, b"\0"),
        ordinal=ordinal,
        record=number,
        rows=int(state["rows"][s]),
        arrived=int(part.arrived[i]),
        at=int(part.at[i]),
        historic=bool(part.historic[i]),
        evidence=float(np.log10(path.total[i])),
        threshold=float(rules.threshold[s]),
        severity=float(state["alarm_severity"][s]),
        findings=found,
    )
    restart(state, s, int(part.at[i]))
    return crossing


def _alarm_id(name: bytes, incarnation: int, number: int, raw: np.void) -> bytes:
    digest = hashlib.blake2b(digest_size=16, person=b"tallyward alarm")
    digest.update(name + b"\0" + incarnation.to_bytes(8, "little") + number.to_bytes(8, "little"))
    digest.update(raw.tobytes())
    return digest.digest()
