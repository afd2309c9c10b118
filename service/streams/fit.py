"""How far a stream's digits are from what they are compared with: the law, or its own baseline.

A learned baseline is itself an estimate. Its sampling error is taken off the misfit together with
that of the span, and it widens the interval.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
import numpy.typing as npt
from scipy.special import ndtri

from service.detection.bank import LAW
from service.digits.measures import Estimate, excess_mad
from service.digits.significand import FloatArray, IntArray
from service.digits.views import WATCHED, WATCHED_VIEWS
from service.streams.compiled import compiled
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
    _sum(folded.state["window"], pages.table, pages.count[:, cells], slots, oldest, counts)
    return counts


@compiled
def _sum(
    window: Any, table: Any, count: Any, slots: IntArray, oldest: int, counts: IntArray
) -> None:
    for i in range(len(slots)):
        for place in range(window.shape[1]):
            page = table[slots[i], place]
            if page != 0 and window[slots[i], place] >= oldest:
                for cell in range(counts.shape[1]):
                    counts[i, cell] += count[page, cell]


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
    law = excess_mad(counts, LAW[cells])
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
    c = np.asarray(counts, dtype=np.float64)
    b = np.asarray(base, dtype=np.float64)
    cells = c.shape[-1]
    n = c.sum(axis=-1)
    n = np.where(n > 0, n, np.nan)
    m = b.sum(axis=-1)
    m = np.where(m > 0, m, np.nan)
    q, p = c / n[..., None], b / m[..., None]
    raw = np.abs(q - p).mean(axis=-1)
    apart = 1 / n + 1 / m
    v = np.where(nested, np.maximum(1 / m - 1 / n, 0), apart)
    noise = np.sqrt(2 / np.pi * p * (1 - p)).mean(axis=-1)
    value = np.sqrt(np.maximum(raw**2 - noise**2 * v, 0))
    spread = q * (1 - q) / n[..., None] + p * (1 - p) / m[..., None]
    margin = _Z95 * np.sqrt(apart) / cells
    low = np.maximum(raw - np.sqrt(2 / np.pi * spread).mean(axis=-1) - margin, 0)
    return Estimate(value, np.minimum(low, value), np.minimum(raw + margin, 2 / cells))
