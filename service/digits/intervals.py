"""Intervals for the true share of a cell: for one look exactly, or for all looks and all cells."""

from __future__ import annotations

from collections.abc import Callable
from typing import NamedTuple

import numpy as np
import numpy.typing as npt
from scipy.special import (
    betainc,
    betaincc,
    betainccinv,
    betaincinv,
    betaln,
    expit,
    xlogy,
)

from service.digits.significand import FloatArray
from service.digits.tally import checked_counts, checked_total, nan_if_empty

_TAIL_ERROR = 1e-6
"""Relative error of alpha up to which a bound is taken as found."""


class Interval(NamedTuple):
    """Lower and upper end of a share, float64 arrays of one shape, 0 <= low <= high <= 1."""

    low: FloatArray
    high: FloatArray


def clopper_pearson_upper(
    counts: npt.ArrayLike, n: npt.ArrayLike, alpha: npt.ArrayLike
) -> FloatArray:
    """Return the exact one-sided upper bound of a binomial share at confidence 1 - alpha.

    Clopper & Pearson (1934, *Biometrika* 26, 404-413), who write x for our counts and p for the
    true share, and take epsilon/2 = alpha on each side. For a cell never seen it is
    ``1 - alpha**(1/n)``; where all n amounts were in the cell it is 1, and so where n is 0.

    Parameters
    ----------
    counts : array
        Amounts in the cell, 0 to n; broadcast with n.
    n : array
        Amounts in all; for counts (..., K) pass n (..., 1).
    alpha : array
        Chance that the bound is below the true share, above 0 and below 1; as small as 1e-300.
        It is met within 1e-6, relative.

    Returns
    -------
    float64 array
        Of the broadcast shape.

    Raises
    ------
    ValueError
        If an argument is outside its range.
    """
    c, total, a = _checked_shares(counts, n, alpha)
    more, rest = c + 1, np.maximum(total - c, 1)
    inside = betainccinv(more, rest, a)  # complement: keeps a small alpha
    inside = _mended(inside, betaincc, more, rest, a, -1.0)
    none = -np.expm1(np.log(a) / np.maximum(total, 1))
    return np.asarray(np.where(c == total, 1.0, np.where(c == 0, none, inside)))


def clopper_pearson_lower(
    counts: npt.ArrayLike, n: npt.ArrayLike, alpha: npt.ArrayLike
) -> FloatArray:
    """Return the exact one-sided lower bound of a binomial share at confidence 1 - alpha.

    Clopper & Pearson (1934). 0 for a cell never seen, ``alpha**(1/n)`` where all n amounts were in
    the cell; arguments and errors as ``clopper_pearson_upper``.
    """
    c, total, a = _checked_shares(counts, n, alpha)
    some, more = np.maximum(c, 1), total - c + 1
    inside = _mended(betaincinv(some, more, a), betainc, some, more, a, 1.0)
    every = np.exp(np.log(a) / np.maximum(total, 1))
    return np.asarray(np.where(c == 0, 0.0, np.where(c == total, every, inside)))


def clopper_pearson(counts: npt.ArrayLike, n: npt.ArrayLike, alpha: npt.ArrayLike) -> Interval:
    """Return the exact two-sided interval of Clopper & Pearson (1934), alpha / 2 on each side.

    Arguments and errors as ``clopper_pearson_upper``.
    """
    _, _, a = _checked_shares(counts, n, alpha)
    half = a / 2
    return Interval(clopper_pearson_lower(counts, n, half), clopper_pearson_upper(counts, n, half))


def always_valid(counts: npt.ArrayLike, level: float = 0.95) -> Interval:
    """Return intervals that contain all cells' true shares at all looks together.

    Per cell a Beta-mixture confidence sequence: against a share t the ratio
    B(1/2 + c, 1/2 + n - c) / (B(1/2, 1/2) t^c (1-t)^(n-c)) is a nonnegative martingale with mean
    1 when t is true, so by Ville's inequality it ever reaches K / (1 - level) with chance at
    most (1 - level) / K (Robbins 1970, *Ann. Math. Statist.* 41, 1397-1409; Bonferroni over
    the K cells). Kept are the t where it has not. The mixing law is Jeffreys', which knows no
    reference, so the interval is as good far from one. At 10**12 amounts rounding moves an end by
    a thousandth of its distance from the share, at fewer amounts by less.

    Parameters
    ----------
    counts : array (..., K)
        Amounts in each of K >= 2 cells, whole numbers.
    level : float
        Chance that no true share is ever outside, above 0 and below 1.

    Returns
    -------
    Interval
        Arrays (..., K), low <= c/n <= high; 0 to 1 where nothing is counted.

    Raises
    ------
    ValueError
        If counts or level is outside its range.
    """
    c = checked_counts(counts)
    if not 0 < level < 1:
        raise ValueError(f"level must be above 0 and below 1, got {level}")
    n = np.broadcast_to(c.sum(axis=-1, keepdims=True), c.shape)
    share = np.where(n > 0, c / nan_if_empty(n), 0.5)
    # The ratio is its value at the counted share times exp(n kl(share, t)).
    log_room = (
        np.log(c.shape[-1] / (1 - level))
        - betaln(c + 0.5, n - c + 0.5)
        + np.log(np.pi)
        + xlogy(c, share)
        + xlogy(n - c, 1 - share)
    )
    room = np.maximum(log_room, 0) / np.maximum(n, 1)
    low = np.where(c == n, np.exp(-room), _share_at(share, room, -1.0))
    high = np.where(c == 0, -np.expm1(-room), _share_at(share, room, 1.0))
    low = np.where(c == 0, 0.0, np.minimum(low, share))
    high = np.where(c == n, 1.0, np.maximum(high, share))
    return Interval(np.asarray(low), np.asarray(high))


def _share_at(share: FloatArray, room: FloatArray, side: float) -> FloatArray:
    """Return t below (side -1) or above (+1) the share with kl(share, t) = room.

    In x = logit t the divergence is ``ln(1 + e^x) - share x`` plus a constant: convex, so after
    its first step Newton's method comes down on the root from outside, from any start.
    """
    inner = (share > 0) & (share < 1)
    q = np.where(inner, share, 0.5)
    entropy = xlogy(q, q) + xlogy(1 - q, 1 - q)
    x = np.log(q) - np.log1p(-q) + side * np.sqrt(2 * room / (q * (1 - q)))
    for _ in range(60):
        value = np.logaddexp(0, x) - q * x + entropy - room
        slope = 1 / (1 + np.exp(-np.clip(x, -700, 700))) - q
        # No room, no slope: then the share itself is the answer.
        step = np.divide(value, slope, out=np.zeros_like(x), where=slope != 0)
        x = x - step
        if np.all(np.abs(step) <= 1e-12 * (1 + np.abs(x))):
            break
    return np.asarray(1 / (1 + np.exp(-np.clip(x, -700, 700))))


def _mended(
    found: FloatArray,
    tail: Callable[[FloatArray, FloatArray, FloatArray], FloatArray],
    a: FloatArray,
    b: FloatArray,
    alpha: FloatArray,
    sign: float,
) -> FloatArray:
    """Return x with tail(a, b, x) = alpha, found again by bisection where it was not.

    SciPy's inverses lose their way at a thousand in 10**9, and below an alpha of 1e-150. The tail
    rises with x (sign 1) or falls (-1).
    """
    a, b, alpha = np.broadcast_arrays(a, b, alpha)
    with np.errstate(invalid="ignore"):
        lost = ~(np.abs(tail(a, b, found) - alpha) <= _TAIL_ERROR * alpha)
    if not lost.any():
        return found
    a, b, alpha = a[lost], b[lost], alpha[lost]
    low = np.full(a.shape, -800.0)  # as logits
    high = -low
    for _ in range(70):
        middle = (low + high) / 2
        beyond = sign * (tail(a, b, expit(middle)) - alpha) > 0
        low, high = np.where(beyond, low, middle), np.where(beyond, middle, high)
    mended = np.array(found)
    mended[lost] = expit(high if sign < 0 else low)
    return mended


def _checked_shares(
    counts: npt.ArrayLike, n: npt.ArrayLike, alpha: npt.ArrayLike
) -> tuple[FloatArray, FloatArray, FloatArray]:
    c, total = np.broadcast_arrays(np.asarray(counts, dtype=np.float64), checked_total(n))
    if not np.all((c >= 0) & (c <= total) & (c == np.floor(c))):
        raise ValueError("counts must be whole numbers from 0 to n")
    a = np.asarray(alpha, dtype=np.float64)
    if not np.all((a > 0) & (a < 1)):
        raise ValueError("alpha must be above 0 and below 1")
    return c, total, a
