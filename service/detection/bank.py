"""The bank of detectors: each a contamination alternative to "no cell exceeds its bound".

A *cell* detector bets that one cell holds a share ``eps`` too much, a *shape* detector that the
whole lead pair moved, a *joint* detector that cells which the merchant hardly used come up, or
amounts just below a review limit, or amounts that were there a moment before.
Each multiplies its capital by a likelihood ratio L whose expectation is at most 1 while every
cell's probability is at most its bound u; the mixture Shiryaev-Roberts statistic of the bank
crosses A at most once in A transactions on average, without calibration.

Shiryaev (1963), Roberts (1966), Pollak (1985); e-detectors: Shin, Ramdas & Rinaldo (2022).
"""

from __future__ import annotations

import numpy as np

from service.detection.cells import (
    CELLS,
    HALVES,
    QUARTERS,
    THIRDS,
    VIEW_OF_CELL,
    with_coarse,
)
from service.digits.laws import law_cells, leading_law
from service.digits.significand import FloatArray
from service.digits.views import LEAD_DIGIT, LEAD_PAIR, TAIL_PAIR

EPSILONS = np.array([0.04, 0.12, 0.40])
"""Contaminations that the cell detectors bet on."""

RETAINED = 1 - EPSILONS
EPSILON_SHARES = np.array([1.0, 1.0, 2.0]) / 4

LAW = with_coarse(law_cells())
"""Shares of all cells under the law, (224,)."""

CUSUM_EPSILON = 1
CUSUM_RETAINED = float(RETAINED[CUSUM_EPSILON])
CUSUM_GAIN = float(EPSILONS[CUSUM_EPSILON])
"""The onset and severity of a cell are read from its CUSUM at this contamination (Page 1954)."""


def _cell_weights() -> FloatArray:
    """Weights of the cells over all contaminations: 0.86 in all, more where people cheat."""
    weights = np.empty(CELLS)
    weights[LEAD_DIGIT] = 0.11 / 9
    pair = np.full(90, 0.30 * 0.55 / 81)
    pair[9::10] = 0.30 * 0.45 / 9  # just under a round number
    weights[LEAD_PAIR] = pair
    tail = np.full(100, 0.34 * 0.6 / 92)
    tail[[0, 25, 49, 50, 75, 90, 95, 99]] = 0.34 * 0.4 / 8
    weights[TAIL_PAIR] = tail
    for cells, weight in ((HALVES, 0.05), (QUARTERS, 0.03), (THIRDS, 0.03)):
        weights[cells] = weight / (cells.stop - cells.start)
    return weights


CELL_WEIGHTS = _cell_weights()
VIEW_WEIGHTS = np.bincount(VIEW_OF_CELL, CELL_WEIGHTS)
"""Weights of all cells that count with each watched view, (3,)."""

INVENTED = np.array([0.15, 0.40])
"""Shares of invented amounts (digits uniform) in the first shape detectors."""

_RHO = (0.25, 0.50)
_PHASES = np.arange(6) / 6
SHIFT_RHO = np.repeat(_RHO, len(_PHASES))
SHIFT_PHASE = np.tile(_PHASES, len(_RHO))
SHAPES = len(INVENTED) + len(SHIFT_RHO)
SHAPE_WEIGHTS = np.concatenate([np.full(2, 0.025), np.full(12, 0.04 / 12)])

RARE_VIEWS = (1, 2)
"""Watched views that have a rare cells detector: lead pair and tail pair."""

REACH = 64
"""Rows before a row among which its exact amount is looked for."""

LIMITS = 4
"""Most review limits that a policy may name for one currency."""

REPEATS = len(RARE_VIEWS)
FIRST_LIMIT = REPEATS + 1
JOINT = FIRST_LIMIT + LIMITS
"""Joint detectors, in order: the rare cells of each such view, repeated amounts, each limit."""

JOINT_EPSILONS = np.array([0.12, 0.40])
JOINT_WEIGHTS = np.array([0.015, 0.015, 0.01, 0.0025, 0.0025, 0.0025, 0.0025])
"""Weight of each joint detector, shared evenly by the contaminations."""


def _shift_waves() -> FloatArray:
    """Average of cos 2 pi (y - phase) over each lead pair's arc of the circle, (12, 90)."""
    edges = np.log10(np.arange(10, 101) / 10)
    turns = 2 * np.pi * (edges - SHIFT_PHASE[:, None])
    return np.asarray(np.diff(np.sin(turns), axis=1) / (2 * np.pi * leading_law(2)))


SHIFT_WAVES = _shift_waves()


def alternatives(reference: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return what the shape detectors bet on, and the normalisers of the shifts.

    Parameters
    ----------
    reference : float64 array (..., 90)
        Shares of the lead pair under the reference, summing to 1.

    Returns
    -------
    q : float64 array (..., 14, 90)
        Invented digits ``(1-e) p0 + e/90``; shifts ``p0 (1 + rho cos 2 pi (y - phase)) / z``.
    z : float64 array (..., 14)
        1 for invented digits.

    Raises
    ------
    ValueError
        If reference has not 90 positive shares.
    """
    if np.shape(reference)[-1:] != (90,) or np.min(reference) <= 0:
        raise ValueError("reference must have 90 shares above 0, one for each lead pair")
    p0 = np.asarray(reference, dtype=np.float64)[..., None, :]
    invented = (1 - INVENTED[:, None]) * p0 + INVENTED[:, None] / 90
    waves = p0 * (1 + SHIFT_RHO[:, None] * SHIFT_WAVES)
    z = np.concatenate([np.ones((*p0.shape[:-2], len(INVENTED))), waves.sum(axis=-1)], axis=-1)
    return np.concatenate([invented, waves / z[..., len(INVENTED) :, None]], axis=-2), z


def projection(q: FloatArray, bounds: FloatArray) -> FloatArray:
    """Return c with ``sum_k min(u_k, c q_k) = 1``: the reverse information projection of q.

    Grünwald, de Heide & Koolen (2024), *J. R. Statist. Soc. B* 86, 1091-1128 (from memory): the
    likelihood ratio of q to its projection is an e-value for the whole null.

    ``p*_k = min(u_k, c q_k)`` is the member of the null ``{p <= u}`` nearest to q, and the largest
    expectation of ``q/p*`` over the null is exactly 1. Where q itself lies in the null, c is 1.

    Parameters
    ----------
    q : float64 array (..., J, K)
        Alternatives, each summing to 1.
    bounds : float64 array (..., K)
        Bounds u of the cells, summing to at least 1.

    Returns
    -------
    float64 array (..., J)

    Raises
    ------
    ValueError
        If the bounds of some null sum to less than 1.
    """
    u = np.broadcast_to(np.asarray(bounds, dtype=np.float64)[..., None, :], q.shape)
    if np.any(u.sum(axis=-1) < 1 - 1e-9):
        raise ValueError("bounds must sum to at least 1, or no distribution fits under them")
    ratio = u / q
    order = np.argsort(ratio, axis=-1)
    u_sorted = np.take_along_axis(u, order, axis=-1)
    q_sorted = np.take_along_axis(q, order, axis=-1)
    capped = np.cumsum(u_sorted, axis=-1) - u_sorted  # mass of the cells capped before this one
    free = np.cumsum(q_sorted[..., ::-1], axis=-1)[..., ::-1]  # q of this and the later cells
    c = (1 - capped) / free
    fits = c <= np.take_along_axis(ratio, order, axis=-1)
    first = np.argmax(fits, axis=-1)
    chosen = np.take_along_axis(c, first[..., None], axis=-1)[..., 0]
    # without tolerance the bounds sum to 1 and rounding may leave no fit: then p* is u itself
    return np.where(fits.any(axis=-1), chosen, ratio.max(axis=-1))
