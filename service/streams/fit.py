"""How far a stream's digits are from what they are compared with: the law, or its own baseline.

A learned baseline is itself an estimate. Its sampling error is taken off the misfit together with
that of the span, and it widens the interval.
"""

from __future__ import annotations

import math
from typing import Any, NamedTuple

import numpy as np
import numpy.typing as npt
from scipy.special import ndtri

from service.detection.bank import LAW
from service.digits.compiled import compiled
from service.digits.measures import Estimate, excess_mad_of_rows
from service.digits.significand import FloatArray, IntArray
from service.digits.views import WATCHED, WATCHED_VIEWS
from service.streams.folded import Folded
from service.streams.ordinary import bounds_of_view
from service.streams.state import BY_OWN, States
from service.streams.walk import BUCKET_MS, WINDOW_MS

SPANS = ("window", "lifetime")

_Z95 = float(ndtri(0.975))


class Fit(NamedTuple):
    """Excess MAD of one view against its reference, and against the law; arrays (n,)."""

    reference: Estimate
    law: Estimate


def window_counts(folded: Folded, slots: IntArray, cells: slice, now: int) -> IntArray:
    """Count the rolling window's rows in a range of cells.

    The window holds every bucket that overlaps the 7 days before now, so up to 6 hours more than
    7 days of event time; rows that were late at arrival are not in it.

    Parameters
    ----------
    folded : Folded
    slots : int64 array (n,)
    cells : slice
        Of the 199 watched cells.
    now : int
        Milliseconds since 1970 UTC.

    Returns
    -------
    int64 array (n, K)
    """
    counts = np.zeros((len(slots), cells.stop - cells.start), np.int64)
    oldest, pages = (now - WINDOW_MS) // BUCKET_MS, folded.pages
    _sum(folded.state, pages.table, pages.count, slots, oldest, cells.start, counts)
    return counts


@compiled
def _sum(
    states: Any,
    table: Any,
    count: Any,
    slots: IntArray,
    oldest: int,
    first: int,
    counts: IntArray,
) -> None:
    for i in range(len(slots)):
        window = states[slots[i]].window
        for place in range(len(window)):
            page = table[slots[i], place]
            if page != 0 and window[place] >= oldest:
                for cell in range(counts.shape[1]):
                    counts[i, cell] += count[page, first + cell]


def by_own(state: States, view: int) -> npt.NDArray[np.bool_]:
    """Return which streams compare a watched view with their own baseline."""
    return np.asarray(state["reference"][..., view] == BY_OWN)


def expected(state: States, view: int) -> FloatArray:
    """Return the reference's shares of a watched view, float64 (..., K).

    NaN where an own baseline holds no row that the view sees.
    """
    cells = WATCHED[WATCHED_VIEWS[view]]
    base = state["cell"]["base"][..., cells].astype(np.float64)
    rows = base.sum(axis=-1, keepdims=True)
    own = by_own(state, view)[..., None]
    return np.where(own, base / np.where(rows > 0, rows, np.nan), LAW[cells])


def bounds(state: States, view: int, tolerance: float) -> FloatArray:
    """Return the bounds u of a watched view's cells, float64 (..., K), tolerance included.

    While a baseline is being learned they are the law's, though nothing is judged by them yet.
    """
    return np.minimum(bounds_of_view(state, view) * (1 + tolerance), 1.0)


def fit(
    state: States,
    slots: IntArray,
    view: int,
    counts: IntArray,
    lifetime: npt.NDArray[np.bool_],
) -> Fit:
    """Return how far counts of a watched view are from the reference and from the law.

    Parameters
    ----------
    state : array of ``STATE``
    slots : int64 array (n,)
    view : int
        Its place in ``WATCHED_VIEWS``.
    counts : int64 array (n, K)
        Rows in each cell over the span.
    lifetime : bool array (n,)
        Whether the span is the stream's life, of which the baseline is a part.
    """
    cells = WATCHED[WATCHED_VIEWS[view]]
    law = excess_mad_of_rows(counts, LAW[cells])
    own = np.flatnonzero(np.equal(state["reference"][slots, view], BY_OWN))
    if not own.size:
        return Fit(law, law)
    learned = excess_of_learned(
        counts[own], state["cell"]["base"][slots[own], cells], lifetime[own]
    )
    merged = [old.copy() for old in law]
    for new, one in zip(merged, learned, strict=True):
        new[own] = one
    return Fit(Estimate(*merged), law)


def excess_of_learned(
    counts: npt.ArrayLike, base: npt.ArrayLike, nested: npt.ArrayLike
) -> Estimate:
    """Return the MAD between a span and a learned baseline, less what sampling explains.

    With n rows in the span and m in the baseline, noise alone gives a MAD of about c sqrt(v),
    ``v = 1/n + 1/m``, or ``1/m - 1/n`` where the baseline is part of the span (c as in
    ``measures.noise_constant``, at the baseline's shares). The interval is made as that of
    ``measures.excess_mad`` for two independent samples: by the Efron-Stein inequality the MAD's
    standard deviation is at most ``s = sqrt(1/n + 1/m) / K``, and its mean is above the
    population's by at most the noise of both. Where the baseline is part of the span, or the
    window reaches back into it, the interval is wider than it had to be.

    Parameters
    ----------
    counts, base : int arrays (..., K)
        Rows in each cell of the span, and of the baseline.
    nested : bool array (...)
        Whether the baseline's rows are among those of the span.

    Returns
    -------
    Estimate
        Arrays (...), each 0 to 2/K with low <= value <= high; NaN where span or baseline is empty.
    """
    c, b = np.broadcast_arrays(np.asarray(counts), np.asarray(base))
    within = np.array(np.broadcast_to(nested, c.shape[:-1]), bool).reshape(-1)
    found = _excess_of_learned(_rows(c), _rows(b), within, _Z95)
    return Estimate(*found.reshape(3, *c.shape[:-1]))


def _rows(counts: npt.NDArray[Any]) -> FloatArray:
    return np.array(counts, np.float64, order="C").reshape(-1, counts.shape[-1])


@compiled
def _excess_of_learned(counts: Any, base: Any, nested: Any, z95: float) -> FloatArray:
    rows, cells = counts.shape
    found = np.full((3, rows), np.nan)
    for i in range(rows):
        n, m = 0.0, 0.0
        for k in range(cells):
            n += counts[i, k]
            m += base[i, k]
        if n == 0 or m == 0:
            continue
        raw, noise, both = 0.0, 0.0, 0.0
        for k in range(cells):
            p, q = base[i, k] / m, counts[i, k] / n
            raw += abs(q - p)
            noise += math.sqrt(2 / math.pi * p * (1 - p))
            spread = q * (1 - q) / n + p * (1 - p) / m
            both += math.sqrt(2 / math.pi * spread)
        raw, noise, both = raw / cells, noise / cells, both / cells
        apart = 1 / n + 1 / m
        v = max(1 / m - 1 / n, 0.0) if nested[i] else apart
        margin = z95 * math.sqrt(apart) / cells
        value = min(math.sqrt(max(raw**2 - noise**2 * v, 0.0)), 2 / cells)
        found[0, i] = value
        found[1, i] = min(max(raw - both - margin, 0.0), value)
        found[2, i] = min(raw + margin, 2 / cells)
    return found
