"""What carries the evidence of a stream: which cells, or which shape, since when, how strongly."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from service.detection import bank
from service.detection.cells import COARSE, VIEW_OF_CELL, pairs_of
from service.digits.significand import FloatArray
from service.digits.views import LEAD_PAIR, WATCHED, WATCHED_VIEWS, cell_label
from service.streams.ordinary import bounds_of_cells, bounds_of_view
from service.streams.state import BY_OWN, States

NOTABLE = 0.05
"""Share of the evidence below which a view or shape is not mentioned."""

LIMIT = "limit"
REPEAT = "repeat"

MOST_REPEATED = 3
"""Amounts named of those that repeat."""

MOST_CELLS = 9
"""Cells named of a pattern that has many."""

COMPANION = 0.25
"""Cells that carry at least so much of the strongest cell's evidence are named with it."""


@dataclass(frozen=True)
class Finding:
    """One pattern that carries evidence.

    Attributes
    ----------
    view : str
        A watched view, ``limit`` for amounts just below a review limit, or ``repeat`` for amounts
        that repeat one of the few before them.
    pattern : str
        ``cell``, ``rare_cells`` or ``shape``.
    cells : tuple of str
        Strongest first; of rare cells those that came up most; for a shape the cells most in
        excess under it.
    members : tuple of int
        Numbers of the cells whose rows are counted for it; one coarse cell stands for its pairs.
    weight : float
        Share of the whole evidence, 0 to 1.
    onset_row : int
        The stream's row with which the run of evidence began, from 1.
    onset_at : int
        Event time of that row, ms since 1970 UTC.
    observed, expected, bound : float
        Share of the cells among the amounts that the view sees since the onset (selected by the
        alarm, so biased upwards), under the reference, and the most that is taken as ordinary.
        NaN observed for a shape.
    reference : str
        ``law`` or ``own``.
    severity : float
        Log-likelihood gathered since the onset, in nats.
    hits, seen : int
        Rows in the cells, and rows that the view saw, since the onset.
    spent : float
        Minor units of the rows in the cells.
    low, high : int
        Of a review limit: amounts from the first to below the second, in minor units.
    shape : str
        For a shape: ``invented`` or ``shifted``.
    """

    view: str
    pattern: str
    cells: tuple[str, ...]
    members: tuple[int, ...]
    weight: float
    onset_row: int
    onset_at: int
    observed: float
    expected: float
    bound: float
    reference: str
    severity: float
    hits: int = 0
    seen: int = 0
    spent: float = 0.0
    low: int = 0
    high: int = 0
    shape: str = ""


def evidence_of_cells(state: States) -> FloatArray:
    """Return the weighted value of every cell's detectors now, (..., 224).

    Between hits a value decays in closed form: n misses act as
    ``R -> r**n R + r (1 - r**n) / (1 - r)``.
    """
    misses = (state["clock"][..., VIEW_OF_CELL] - state["cell"]["hit"])[..., None].astype(
        np.float64
    )
    kept = bank.RETAINED**misses
    value = kept * state["cell"]["value"] + bank.RETAINED * (1 - kept) / bank.EPSILONS
    return np.asarray(bank.CELL_WEIGHTS * (value * bank.EPSILON_SHARES).sum(axis=-1))


def cusums(state: States) -> FloatArray:
    """Return every cell's CUSUM now, (..., 224); where it is 0, the cell's run is over."""
    misses = state["clock"][..., VIEW_OF_CELL] - state["cell"]["hit"]
    return log_of(state["cell"]["ratio"] * bank.CUSUM_RETAINED**misses)


def log_of(ratio: npt.ArrayLike) -> FloatArray:
    """Return the CUSUM of a ratio gathered since onset, 0 where it rests."""
    return np.asarray(np.log(np.maximum(ratio, 1.0)))


def findings(
    state: States,
    tolerance: FloatArray,
    active: FloatArray,
    shapes: FloatArray,
    joint: FloatArray,
    limits: Sequence[tuple[int, int]],
) -> list[Finding]:
    """Return what carries one stream's evidence, strongest first.

    Parameters
    ----------
    state : one record of ``STATE``
    tolerance, active : float64 arrays (3,)
        Of the watched views.
    shapes : float64 array (14,)
        Weights of the shape detectors in force.
    joint : float64 array (7,)
        Weights of the joint detectors in force.
    limits : sequence of (int, int)
        Amounts just below each review limit are from the first to below the second.
    """
    cells = evidence_of_cells(state) * active[VIEW_OF_CELL]
    shape = state["shape"] * shapes
    together = state["joint_value"].mean(axis=-1) * joint
    whole = float(cells.sum() + shape.sum() + together.sum())
    if whole <= 0:
        return []
    found = [
        _cells(state, view, cells, whole, float(tolerance[view]))
        for view, part in enumerate(np.bincount(VIEW_OF_CELL, cells).tolist())
        if part >= NOTABLE * whole
    ]
    found += [
        _joint(state, place, float(together[place]) / whole, tolerance, limits)
        for place in np.flatnonzero(together >= NOTABLE * whole).tolist()
    ]
    if shape.sum() >= NOTABLE * whole:
        found.append(_shape(state, shape, whole, float(tolerance[1])))
    return sorted(found, key=lambda f: -f.weight)


def _reference(state: States, view: int) -> tuple[str, FloatArray]:
    """Name of a view's reference, and its shares of all cells, (224,)."""
    if state["reference"][view] == BY_OWN:
        rows = state["cell"]["base"][WATCHED[WATCHED_VIEWS[view]]].sum()
        return "own", state["cell"]["base"].astype(np.float64) / max(rows, 1.0)
    return "law", bank.LAW


def _cells(
    state: States, view: int, evidence: FloatArray, whole: float, tolerance: float
) -> Finding:
    numbers = np.flatnonzero(view == VIEW_OF_CELL)
    gathered = cusums(state)
    runs = np.where(gathered > 0, state["cell"]["run"], 0)
    strongest = int(numbers[np.argmax(evidence[numbers])])
    if strongest >= COARSE.start:
        chosen = np.array([strongest])
        named = pairs_of(strongest)
    else:
        fine = numbers[numbers < COARSE.start]
        strong = evidence[fine] >= COMPANION * evidence[strongest]
        chosen = fine[strong & (runs[fine] > 0)]
        chosen = chosen[np.argsort(-evidence[chosen], kind="stable")]
        if not chosen.size:
            chosen = np.array([strongest])
        named = chosen.tolist()
    label, share = _reference(state, view)
    going = chosen[runs[chosen] > 0]
    onset_row, onset_at, since = int(state["rows"]), int(state["last_at"]), 1
    if going.size:
        first = going[np.argmin(state["cell"]["onset"][going])]
        onset_row, onset_at = (
            int(state["cell"]["onset"][first]),
            int(state["cell"]["onset_at"][first]),
        )
        since = int(state["clock"][view]) - int(state["cell"]["onset_clock"][first]) + 1
    hits = int(runs[going].sum())
    bound = float(bounds_of_cells(state, chosen).sum()) * (1 + tolerance)
    return Finding(
        view=WATCHED_VIEWS[view],
        pattern="cell",
        cells=tuple(cell_label(k) for k in named),
        members=tuple(chosen.tolist()),
        weight=float(evidence[numbers].sum()) / whole,
        onset_row=onset_row,
        onset_at=onset_at,
        observed=hits / since,
        expected=float(share[chosen].sum()),
        bound=min(bound, 1.0),
        reference=label,
        severity=float(gathered[strongest]),
        hits=hits,
        seen=since,
        spent=float(state["cell"]["spent"][going].sum()),
    )


def _joint(
    state: States,
    place: int,
    weight: float,
    tolerance: FloatArray,
    limits: Sequence[tuple[int, int]],
) -> Finding:
    """Describe what is bounded together: rare cells, repeated amounts, those below a limit."""
    if place < len(bank.RARE_VIEWS):
        view = bank.RARE_VIEWS[place]
        part = WATCHED[WATCHED_VIEWS[view]]
        members = part.start + np.flatnonzero(state["cell"]["rare"][part])
        runs = np.where(cusums(state) > 0, state["cell"]["run"], 0)
        often = members[np.argsort(-runs[members], kind="stable")]
        base = state["cell"]["base"].astype(np.float64)
        name, pattern = WATCHED_VIEWS[view], "rare_cells"
        cells = tuple(cell_label(int(k)) for k in often[:MOST_CELLS])
        expected = float(base[members].sum() / max(base[part].sum(), 1.0))
        low = high = 0
    elif place == bank.REPEATS:
        view, name, pattern, members = 1, REPEAT, "cell", np.empty(0, int)
        amounts, times = np.unique(state["recent"], return_counts=True)
        often = amounts[np.argsort(-times * (amounts > 0), kind="stable")][:MOST_REPEATED]
        cells = tuple(str(a) for a in often.tolist() if a)
        expected = float(state["repeat_share"])
        low = high = 0
    else:
        k = place - bank.FIRST_LIMIT
        low, high = limits[k]
        view, name, pattern, cells, members = 1, LIMIT, "cell", (str(high),), np.empty(0, int)
        expected = float(state["limit_base"][k]) / max(int(state["limit_rows"]), 1)
    seen = max(int(state["joint_seen"][place]), 1)
    return Finding(
        view=name,
        pattern=pattern,
        cells=cells,
        members=tuple(members.tolist()),
        weight=weight,
        onset_row=int(state["joint_onset"][place]) or int(state["rows"]),
        onset_at=int(state["joint_onset_at"][place]) or int(state["last_at"]),
        observed=int(state["joint_hits"][place]) / seen,
        expected=expected,
        bound=min(float(state["joint_bound"][place]) * (1 + float(tolerance[view])), 1.0),
        reference="own",
        severity=float(log_of(state["joint_ratio"][place])),
        hits=int(state["joint_hits"][place]),
        seen=seen,
        spent=float(state["joint_spent"][place]),
        low=low,
        high=high,
    )


def _shape(state: States, evidence: FloatArray, whole: float, tolerance: float) -> Finding:
    j = int(np.argmax(evidence))
    label, shares = _reference(state, 1)
    share, bound = shares[LEAD_PAIR], bounds_of_view(state, 1)
    q = bank.alternatives(share + 1e-12)[0][j]
    most = np.argsort(-(q - share), kind="stable")[:MOST_CELLS]
    return Finding(
        view="lead_pair",
        pattern="shape",
        cells=tuple(cell_label(LEAD_PAIR.start + int(k)) for k in most),
        members=tuple(LEAD_PAIR.start + int(k) for k in most),
        weight=float(evidence.sum()) / whole,
        onset_row=int(state["shape_onset"][j]) or int(state["rows"]),
        onset_at=int(state["shape_onset_at"][j]) or int(state["last_at"]),
        observed=float("nan"),
        expected=float(share[most].sum()),
        bound=min(float(bound[most].sum()) * (1 + tolerance), 1.0),
        reference=label,
        severity=float(log_of(state["shape_ratio"][j])),
        shape="invented" if j < len(bank.INVENTED) else "shifted",
    )
