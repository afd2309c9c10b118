"""What any detector could achieve, to first order: the information of a row of a changed stream.

To first order no detector whose mean time between false alarms is A finds a change sooner, on
average and in the worst case, than after log(A) / KL rows, where KL is the Kullback-Leibler
divergence of a changed row from the null (Lorden 1971, *Ann. Math. Stat.* 42, 1897-1908; exactly
optimal: Moustakides 1986, *Ann. Stat.* 14, 1379-1387; for Shiryaev-Roberts procedures: Pollak
1985, *Ann. Stat.* 13, 206-227; all from memory). It is a *benchmark*, not a bound for each table:
it neglects terms that do not grow with log A, counts only one view, and an alarm that happens to
come early (a false one, or evidence gathered before the change) may beat it.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from service.detection.bank import LAW, RARE_VIEWS, projection
from service.detection.baseline import BOUNDS, rare_cells, spent_alpha
from service.detection.cells import HALVES, QUARTERS, THIRDS, with_coarse
from service.detection.policy import Policy
from service.digits.intervals import clopper_pearson_upper
from service.digits.significand import FloatArray
from service.digits.views import WATCHED, WATCHED_VIEWS
from service.simulation.fraud import Fraud
from service.simulation.source import Honest, within

_PARTITIONS = (*enumerate(WATCHED.values()), (1, HALVES), (1, QUARTERS), (1, THIRDS))
"""Views and coarse cells, each with the place of the view that it counts with."""


@dataclass(frozen=True)
class Information:
    """Information of a row after the change, in the view that shows the change best.

    Attributes
    ----------
    view : str
    per_row : float
        Nats, at least 0.
    """

    view: str
    per_row: float

    def rows(self, threshold: float) -> float:
        """Return log(threshold) / per_row, infinite if the change lies inside the null."""
        return float(np.log(threshold) / self.per_row) if self.per_row > 1e-12 else float("inf")


def information(
    policy: Policy, honest: Honest, fraud: Fraud, share: float, *, seed: int = 0
) -> Information:
    """Return the information of a changed row against the nearest member of the null.

    The null of a view is ``p_k <= u_k`` with the policy's tolerance: u is the law where the policy
    compares with it (under ``auto``, where the honest pattern lies within the law's bounds), else
    the confidence bounds, single and joint, of an own baseline that saw each cell as often as
    expected. Lead pairs are also taken by the coarse cells that count with them. Left out are
    review limits, and that bounds are larger where rows come in bursts. For patterns whose
    merchants differ, the rows log(A) / KL are averaged over some merchants.

    Parameters
    ----------
    policy : Policy
    honest : Honest
    fraud : Fraud
    share : float
        Share of rows replaced, 0 to 1.
    seed : int
        Of shares that are counted from simulated rows; see `Honest.cells`.
    """
    within("share", share, 0, 1)
    found = [_of_merchant(policy, p, fraud, share, honest.rows_a_day()) for p in honest.cells(seed)]
    rows = np.array([i.rows(np.e) for i in found])
    best = max(found, key=lambda i: sum(j.per_row for j in found if j.view == i.view))
    return Information(best.view, float(1 / rows.mean()))


def nearest(
    q: FloatArray,
    bounds: FloatArray,
    together: npt.NDArray[np.bool_] | None = None,
    joint: float = 1.0,
) -> FloatArray:
    """Return the member of the null nearest to q, on the cells that q uses.

    The reverse information projection ``p*_k = min(u_k, c q_k)`` minimises KL(q, p) over
    ``{p <= u, sum p = 1}``; see `bank.projection`. Where some cells together may hold at most
    ``joint`` and would hold more, they hold just that, and each part is projected by itself. Where
    the bounds of q's cells sum to less than their part, p* is u on them, and the rest of its mass
    lies where q has none.

    Parameters
    ----------
    q : float64 array (K,)
        Shares of sum 1.
    bounds : float64 array (K,)
        Bounds u of sum at least 1.
    together : bool array (K,), optional
        Cells whose joint share is bounded, too.
    joint : float
        Their bound, above 0.
    """
    p = _projected(q, bounds, 1.0)
    if together is not None and p[together].sum() > joint:
        p[together] = _projected(q[together], bounds[together], joint)
        p[~together] = _projected(q[~together], bounds[~together], 1 - joint)
    return p


def _projected(q: FloatArray, bounds: FloatArray, mass: float) -> FloatArray:
    """Return min(u, c q) of the given sum, or u on q's cells if it sums to no more."""
    used = q > 0
    p = np.zeros_like(q)
    u = bounds[used]
    if u.sum() <= mass:
        p[used] = u
    else:
        shares = q[used] / q[used].sum()
        c = float(projection(shares[None], u / mass)[0])
        p[used] = np.minimum(u, c * shares * mass)
    return p


def divergence(q: FloatArray, p: FloatArray) -> float:
    """Return KL(q, p) in nats over the cells that q uses; p must be above 0 there."""
    used = q > 0
    return float((q[used] * np.log(q[used] / p[used])).sum())


class _Part(NamedTuple):
    """A partition of the rows that a view sees, and its bounds, tolerance included."""

    view: str
    cells: slice
    bounds: FloatArray
    rare: npt.NDArray[np.bool_]
    joint: float


def _of_merchant(
    policy: Policy, honest: FloatArray, fraud: Fraud, share: float, per_day: float
) -> Information:
    changed = with_coarse((1 - share) * honest + share * fraud.cells(honest))
    best = Information(policy.views[0], 0.0)
    for part in _null(policy, honest, per_day):
        q = changed[part.cells]
        seen = float(q.sum())
        if seen <= 0 or part.view not in policy.views:
            continue
        p = nearest(q / seen, part.bounds, part.rare, part.joint)
        found = seen * max(divergence(q / seen, p), 0.0)
        if found > best.per_row:
            best = Information(part.view, found)
    return best


def _null(policy: Policy, honest: FloatArray, per_day: float) -> Iterator[_Part]:
    """Yield the partitions with the bounds that a baseline of just the expected counts leads to."""
    tolerances = policy.tolerances()
    rows = max(policy.baseline_size, round(policy.baseline_days * per_day))
    alpha = spent_alpha(policy.baseline_confidence, 0)
    half = np.rint(with_coarse(honest) * rows / 2).astype(np.int64)
    seen = np.array([int(half[cells].sum()) for cells in WATCHED.values()])
    rare, joint = rare_cells(np.stack([half, half]), np.stack([seen, seen]), alpha)
    shares = with_coarse(honest)
    for v, cells in _PARTITIONS:
        slack = 1 + tolerances[v]
        p = shares[cells] / max(float(shares[cells].sum()), 1e-300)
        fits = bool(np.all(p <= LAW[cells] * slack + 1e-12))
        bounds, rarely, together = LAW[cells], np.zeros(len(p), bool), 1.0
        if policy.reference == "own" or (policy.reference == "auto" and not fits):
            count = np.rint(shares[cells] * rows).astype(np.int64)
            bounds = clopper_pearson_upper(count, count.sum(), alpha / BOUNDS)
            if v in RARE_VIEWS and cells == WATCHED[WATCHED_VIEWS[v]]:
                rarely = rare[cells]
                together = float(joint[RARE_VIEWS.index(v)]) * slack
        yield _Part(
            WATCHED_VIEWS[v], cells, np.minimum(bounds * slack, 1), rarely, min(together, 1.0)
        )
