"""Every measure of a handful of amounts, looked at once; nothing is kept."""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from service.digits import goodness
from service.digits.evidence import CONCENTRATIONS, e_value, log_evidence, p_value
from service.digits.laws import law_cells, position_law
from service.digits.measures import (
    CUT_OFF_SOURCE,
    CUT_OFFS,
    band,
    mad,
    mad_expected,
    misfit,
    score,
    spread,
)
from service.digits.significand import FloatArray, IntArray, circle, leading
from service.digits.views import (
    CELLS,
    LEAD_DIGIT,
    LEAD_PAIR_FROM,
    WATCHED,
    cell_label,
    cells_hit,
)

Document = dict[str, Any]

MINIMUM_COUNT = 200
"""Amounts below which no score is given, as with a stream under the default policy."""


def check(amounts: IntArray) -> Document:
    """Return every measure of amounts against the laws of digits.

    Parameters
    ----------
    amounts : int64 array (n,)
        Minor units, 0 to 10**15; zeros are counted in ``zero`` and in nothing else.

    Returns
    -------
    Document
        ``count``, ``zero``, the lead digit's ``score`` with its interval, a document per view
        under ``views``, and ``circle``. Values without amounts behind them are None.
    """
    amounts = np.asarray(amounts, dtype=np.int64)
    positive = amounts[amounts > 0]
    hits = np.concatenate(cells_hit(positive))
    counts = np.bincount(hits[hits >= 0], minlength=CELLS)
    law = law_cells()
    second = np.bincount(leading(positive[positive >= LEAD_PAIR_FROM], 2) % 10, minlength=10)
    views = {
        name: {**measures_of(name, counts[cells], law[cells]), **_evidence(name, counts, law)}
        for name, cells in WATCHED.items()
    }
    views["second_digit"] = measures_of("second_digit", second, position_law(2))
    rated = score(counts[LEAD_DIGIT], law[LEAD_DIGIT])
    enough = positive.size >= MINIMUM_COUNT
    return {
        "count": int(positive.size),
        "zero": int(amounts.size - positive.size),
        "score": number(rated.value) if enough else None,
        "score_low": number(rated.low) if enough else None,
        "score_high": number(rated.high) if enough else None,
        "views": views,
        "circle": _circle(positive),
    }


def measures_of(view: str, counts: IntArray, law: FloatArray) -> Document:
    """Return the classical measures of one view against its law, for one look.

    Parameters
    ----------
    view : str
        A view with cells.
    counts : int64 array (K,)
        Amounts in each cell of the view.
    law : float64 array (K,)
        The law of the view, sum 1.
    """
    n = int(counts.sum())
    far = misfit(counts, law)
    chi_square = goodness.chi_square(counts, law)
    g = goodness.g(counts, law)
    largest = goodness.largest_z(counts, law)
    return {
        "count": n,
        "misfit": number(far.value),
        "misfit_low": number(far.low),
        "misfit_high": number(far.high),
        "band": band_of(view, counts, law),
        "mad": number(mad(counts, law)),
        "mad_expected": number(mad_expected(n, law)),
        "chi_square": _test(chi_square.statistic, chi_square.p_value),
        "g": _test(g.statistic, g.p_value),
        "kuiper": number(goodness.kuiper(counts, law)),
        "watson_u2": number(goodness.watson_u2(counts, law)),
        "largest_z": {
            "cell": label(view, int(largest.cell)),
            "z": number(largest.z),
            "p_value": number(largest.p_value),
        },
    }


def band_of(view: str, counts: IntArray, law: FloatArray) -> Document | None:
    """Return the published band of a view with its cut-offs and source, or None."""
    if view not in CUT_OFFS:
        return None
    name = band(view, counts, law).item()
    if name is None:
        return None
    return {"name": name, "cut_offs": list(CUT_OFFS[view]), "source": CUT_OFF_SOURCE}


def label(view: str, cell: int) -> str | None:
    """Return the name of a view's cell, numbered from 0 within the view; None for -1."""
    if cell < 0:
        return None
    return str(cell) if view == "second_digit" else cell_label(WATCHED[view].start + cell)


def number(value: FloatArray | float) -> float | None:
    """Return a value as a JSON number, None where it is not finite."""
    plain = float(value)
    return plain if math.isfinite(plain) else None


def _evidence(view: str, counts: IntArray, law: FloatArray) -> Document:
    cells = WATCHED[view]
    log_e = log_evidence(counts[cells], law[cells], CONCENTRATIONS[view])
    return {"e_value": number(e_value(log_e)), "p_value": number(p_value(log_e))}


def _circle(positive: IntArray) -> Document:
    # Amounts of 1 to 10**15 are exact in float64, so log10 is good to its last bits.
    logs = np.log10(positive.astype(np.float64))
    turns = 2 * np.pi * circle(positive)
    test = goodness.rayleigh(positive.size, np.cos(turns).sum(), np.sin(turns).sum())
    return {
        "count": int(positive.size),
        "rayleigh": _test(test.statistic, test.p_value),
        "spread": number(spread(positive.size, logs.sum(), (logs**2).sum())),
    }


def _test(statistic: FloatArray, p: FloatArray) -> Document:
    return {"statistic": number(statistic), "p_value": number(p)}
