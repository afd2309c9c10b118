"""Simulated streams through the very fold of the service.

Streams are folded in groups, some rows at a time: neither changes a result, only the speed. An
alarm is taken to be settled at once, so that each crossing counts as an alarm of its own and the
detectors go on from zero, as they do after any crossing.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from copy import deepcopy
from functools import cache
from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from service.detection.bank import RARE_VIEWS
from service.detection.cells import CELLS, VIEW_OF_CELL, with_coarse
from service.detection.policy import Policy
from service.digits.significand import FloatArray, IntArray
from service.digits.views import WATCHED, WATCHED_VIEWS
from service.simulation.fraud import Fraud
from service.simulation.outcome import HonestRows, Result, delay, run_length
from service.simulation.source import Honest, uniforms, within
from service.streams.fold import fold
from service.streams.folded import Folded
from service.streams.ordinary import bounds_of_cells
from service.streams.record import RECORD, Stream
from service.streams.rules import Kind
from service.streams.state import BY_LAW, BY_OWN, UNDECIDED
from service.streams.verdicts import guarantee
from service.streams.walk import WINDOW_MS

CURRENCY = "EUR"
"""Of all simulated streams; it decides which of a policy's review limits count."""

_STREAM = Stream("simulated", "sale", CURRENCY)
_SALES = Kind(_STREAM.flow, _STREAM.currency)

GROUP = 40
"""Streams folded together, and `STEP` rows of each at a time; more costs no less a row."""
STEP = 1024

Progress = Callable[[int], None]
"""Told how many more rows are done, or need not be done since their stream's change was found."""

_LATEST_MS = 2**32 * 1000 - 2 * WINDOW_MS


class Seen(NamedTuple):
    """What n streams saw of honest rows, up to their last one.

    Attributes
    ----------
    rows : int64 array (n,)
        Since the references were decided.
    alarms : int64 array (n,)
    reference : uint8 array (n, 3)
        By watched view, as in ``STATE``.
    bounds_hold : bool array (n,) or None
        Whether no cell's true probability, and no joint one of the rare cells, exceeds its bound;
        None where rows are not independent.
    guarantee : list of str, length n
        What the service says of the promise: holds, doubtful or void.
    """

    rows: IntArray
    alarms: IntArray
    reference: npt.NDArray[np.uint8]
    bounds_hold: npt.NDArray[np.bool_] | None
    guarantee: list[str]


class Flock:
    """Some streams under one policy, and how far they have come.

    Parameters
    ----------
    policy : Policy
    honest : Honest
    seed : int
    streams : sequence of int
        Numbers of the streams: with the seed, they decide all of a stream's rows.

    Attributes
    ----------
    numbers : int64 array (n,)
    rows : int
        Rows that every stream has seen.
    """

    def __init__(self, policy: Policy, honest: Honest, seed: int, streams: Sequence[int]) -> None:
        self.numbers = np.asarray(streams, dtype=np.int64)
        self.rows = 0
        self.folded = Folded.new(len(self.numbers))
        self._policy, self._honest = policy, honest
        self._seed = seed
        self._source = honest.source(self._seeds(0))
        self._records = np.zeros((len(self.numbers), STEP), RECORD)
        self._records["policy"] = policy.version

    def _seeds(self, purpose: int) -> list[np.random.SeedSequence]:
        return [
            np.random.SeedSequence(self._seed, spawn_key=(number, purpose))
            for number in self.numbers.tolist()
        ]

    def fork(self) -> Flock:
        """Return a copy that goes its own way from here."""
        return deepcopy(self)

    def keep(self, streams: IntArray) -> None:
        """Go on with some of the streams only, given by their present positions."""
        self.numbers = self.numbers[streams]
        self.folded = self.folded.only(streams.tolist())
        self._source.keep(streams)
        self._records = self._records[: len(streams)]

    def honest(self, rows: int, progress: Progress | None = None) -> Seen:
        """Let honest rows pass."""
        alarms = np.zeros(len(self.numbers), np.int64)
        for step in _steps(rows, STEP):
            amounts, at = self._source.rows(step)
            stream, _ = self._fold(amounts, at)
            alarms += np.bincount(stream, minlength=len(alarms))
            if progress is not None:
                progress(step * len(alarms))
        state = self.folded.state
        learning = np.any(state["reference"] == UNDECIDED, axis=1)
        return Seen(
            rows=np.where(learning, 0, self.rows - state["base_rows"]),
            alarms=alarms,
            reference=state["reference"].copy(),
            bounds_hold=self._bounds_hold(),
            guarantee=[guarantee(s, self._policy, _STREAM)["status"] for s in state],
        )

    def _bounds_hold(self) -> npt.NDArray[np.bool_] | None:
        if not self._honest.independent:
            return None
        state, tolerances = self.folded.state, np.array(self._policy.tolerances())
        p = _probabilities(self._honest)
        bounds = bounds_of_cells(state, np.arange(CELLS)) * (1 + tolerances[VIEW_OF_CELL])
        kept = p <= bounds + 1e-12
        counted = np.array([view in self._policy.views for view in WATCHED_VIEWS])
        holds: npt.NDArray[np.bool_] = np.all(kept | ~counted[VIEW_OF_CELL], axis=1)
        for place, v in enumerate(RARE_VIEWS):
            own = counted[v] & (state["reference"][:, v] == BY_OWN)
            rare = (state["cell"]["rare"] > 0) & (v == VIEW_OF_CELL)
            joint = state["joint_bound"][:, place] * (1 + tolerances[v])
            holds &= ~own | (rare @ p <= joint + 1e-12)
        return holds

    def changed(
        self, fraud: Fraud, share: float, rows: int, progress: Progress | None = None
    ) -> FloatArray:
        """Replace a share of the rows from now on; each stream ends with its first alarm.

        Returns
        -------
        float64 array (n,)
            Rows until the alarm, its row included; infinite if there was none. In the order that
            ``numbers`` had.
        """
        found = np.full(len(self.numbers), np.inf)
        position = np.arange(len(self.numbers))
        rngs = [np.random.Generator(np.random.SFC64(s)) for s in self._seeds(1)]
        before, passed = self.rows, 0
        for step in _steps(rows, 16):
            amounts, at = self._source.rows(step)
            u = uniforms(rngs, step, 1 + fraud.draws)
            amounts = np.where(u[..., 0] < share, fraud.replace(u[..., 1:], amounts), amounts)
            stream, row = self._fold(amounts, at)
            np.minimum.at(found, position[stream], row - before)
            passed += step
            left = np.flatnonzero(np.isinf(found[position]))
            if progress is not None:
                ended = len(position) - len(left)
                progress(step * len(position) + ended * (rows - passed))
            if not left.size:
                break
            if len(left) < len(position):
                self.keep(left)
                position, rngs = position[left], [rngs[s] for s in left.tolist()]
        return found

    def _fold(self, amounts: IntArray, at: IntArray) -> tuple[IntArray, IntArray]:
        """Fold rows (n, step) and return position and row number of each crossing."""
        n, step = amounts.shape
        if int(at.max()) >= _LATEST_MS:
            raise ValueError("rows must end before 2106: take fewer rows, or more of them a day")
        part = self._records[:, :step]
        part["amount"] = amounts
        seconds, part["at_ms"] = np.divmod(at, 1000)
        part["at_s"] = seconds
        # arriving after the rolling window has passed, rows skip the window: no detector needs it
        part["arrived_s"] = seconds + (WINDOW_MS // 1000 + 1)
        names = [str(number).encode() for number in self.numbers.tolist()]
        crossings = fold(
            self.folded,
            part.reshape(-1),
            np.repeat(np.arange(n), step),
            {self._policy.version: self._policy},
            [_SALES] * n,
            names,
        )
        self.folded.state["alarm_crossings"] = 0  # settled
        self.rows += step
        return (
            np.array([c.slot for c in crossings], np.int64),
            np.array([c.rows for c in crossings], np.int64),
        )


def simulate(
    policy: Policy,
    honest: Honest,
    fraud: Fraud | None = None,
    *,
    share: float = 0.1,
    change: int = 2000,
    streams: int = 200,
    rows: int = 5000,
    seed: int = 1,
    group: int = GROUP,
    progress: Progress | None = None,
) -> Result:
    """Run many independent streams under a policy.

    Parameters
    ----------
    policy : Policy
        It must watch the flow ``sale``.
    honest : Honest
    fraud : Fraud, optional
        None to measure false alarms only.
    share : float
        Share of rows that the fraud replaces once it has begun, above 0, at most 1.
    change : int
        Honest rows before it, 0 to below ``rows``. With a learned baseline, these include it.
    streams : int
        1 to 1 000 000.
    rows : int
        Of each stream, in all, 1 to 10**9; a stream ends early when its change is found.
    seed : int
        At least 0. Each stream draws from its own child seed.
    group : int
        Streams folded together, at least 1; it changes the speed only.
    progress : function, optional
        Called with numbers of rows done; they sum to ``streams * rows``.

    Raises
    ------
    ValueError
        If an argument is outside its range; the message names it.
    """
    within("streams", streams, 1, 1_000_000)
    within("rows", rows, 1, 1e9)
    within("seed", seed, 0, float("inf"))
    within("group", group, 1, 1_000_000)
    if not policy.watches("sale"):
        raise ValueError("flows of the policy must include sale")
    if fraud is not None:
        within("share", share, 1e-6, 1)
        within("change", change, 0, rows - 1)
    clean = rows if fraud is None else change
    seen, delays = [], []
    for first in range(0, streams, group):
        flock = Flock(policy, honest, seed, range(first, min(first + group, streams)))
        seen.append(flock.honest(clean, progress))
        if fraud is not None:
            delays.append(flock.changed(fraud, share, rows - change, progress))
    return Result(
        honest=honest_rows(policy, honest, seen),
        delay=delay(np.concatenate(delays), rows - change) if delays else None,
    )


def honest_rows(policy: Policy, honest: Honest, seen: Sequence[Seen]) -> HonestRows:
    """Summarise what several flocks saw of one pattern under one policy."""
    rows = np.concatenate([s.rows for s in seen])
    alarms = np.concatenate([s.alarms for s in seen])
    reference = np.concatenate([s.reference for s in seen])
    threshold = policy.transactions_per_false_alarm
    references = {
        name: dict(zip(WATCHED_VIEWS, (reference == kind).mean(axis=0).tolist(), strict=True))
        for name, kind in (("law", BY_LAW), ("own", BY_OWN), ("learning", UNDECIDED))
    }
    known = [s.bounds_hold for s in seen if s.bounds_hold is not None]
    holds = np.concatenate(known) if known else None
    return HonestRows(
        false_alarms=run_length(rows, alarms, threshold),
        references=references,
        guarantee={
            status: float(np.mean([g == status for s in seen for g in s.guarantee]))
            for status in ("holds", "doubtful", "void")
        },
        bounds_hold=None if holds is None else float(holds.mean()),
        false_alarms_where_bounds_hold=(
            None if holds is None else run_length(rows[holds], alarms[holds], threshold)
        ),
    )


@cache
def _probabilities(honest: Honest) -> FloatArray:
    """Return the probability of every cell among the rows that its view sees, (224,)."""
    cells = honest.cells()[0]
    for view in WATCHED.values():
        cells[view] /= max(float(cells[view].sum()), 1e-300)
    return with_coarse(cells)


def _steps(rows: int, first: int) -> list[int]:
    """Cut rows into steps that double up to `STEP`."""
    steps: list[int] = []
    while rows > 0:
        steps.append(min(first, STEP, rows))
        rows -= steps[-1]
        first *= 2
    return steps
