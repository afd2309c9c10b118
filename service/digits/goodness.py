"""Classic tests of a tally against its reference. Their p-values hold for one look only.

For looks at any time use ``service.digits.evidence``.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
import numpy.typing as npt
from scipy.special import chdtrc, ndtr, rel_entr

from service.digits.significand import FloatArray, IntArray
from service.digits.tally import checked, checked_total, nan_if_empty


class SingleLook(NamedTuple):
    """A statistic and its single-look p-value: float64 arrays, NaN where nothing is counted."""

    statistic: FloatArray
    p_value: FloatArray


class LargestZ(NamedTuple):
    """The cell that deviates most.

    Attributes
    ----------
    cell : int64 array (...)
        Its number within the view, from 0; -1 where nothing is counted.
    z : float64 array (...)
        Its deviation in standard deviations, signed.
    p_value : float64 array (...)
        Its Holm-adjusted single-look p-value.
    """

    cell: IntArray
    z: FloatArray
    p_value: FloatArray


def chi_square(counts: npt.ArrayLike, p: npt.ArrayLike) -> SingleLook:
    """Return Pearson's chi-square, sum (c - np)^2 / np.

    Pearson (1900, *Phil. Mag.* (5) 50, 157-175) writes m for the expected np, m' for the count c,
    e for c - np, and n + 1 for our K cells. The p-value is the chi-square distribution's with one
    degree fewer than the cells with p > 0; it wants np of about 5 or more in each cell.

    Parameters
    ----------
    counts : array (..., K)
        Amounts in each cell, whole numbers.
    p : array (K,) or (..., K)
        Reference shares, sum 1. A count in a cell with p = 0 makes the statistic infinite.

    Returns
    -------
    SingleLook
        Arrays (...); NaN where the tally is empty.

    Raises
    ------
    ValueError
        If counts or p is outside its range.
    """
    c, n, law = checked(counts, p)
    expected = nan_if_empty(n)[..., np.newaxis] * law
    with np.errstate(divide="ignore", invalid="ignore"):
        cells = np.where((c == 0) & (expected == 0), 0.0, (c - expected) ** 2 / expected)
    return _chi_square_test(cells.sum(axis=-1), law)


def g(counts: npt.ArrayLike, p: npt.ArrayLike) -> SingleLook:
    """Return the likelihood-ratio statistic G = 2 sum c ln(c / np).

    It is -2 ln lambda of Wilks (1938, *Ann. Math. Statist.* 9, 60-62), lambda being the likelihood
    of the shares p over that of the counted shares c/n; nearly chi-square where ``chi_square`` is.
    Arguments and errors as there.
    """
    c, n, law = checked(counts, p)
    expected = nan_if_empty(n)[..., np.newaxis] * law
    return _chi_square_test(np.maximum(0, 2 * rel_entr(c, expected).sum(axis=-1)), law)


def kuiper(counts: npt.ArrayLike, p: npt.ArrayLike) -> FloatArray:
    """Return Kuiper's V* of a tally: the largest excesses of the cumulated shares, up and down.

    V = max(F_n - F) + max(F - F_n) over the cell borders (Kuiper 1960, *Proc. Kon. Ned. Akad.
    Wet. A* 63, 38-47; F_n is the cumulated c/n, F the cumulated p), scaled by Stephens (1970,
    *J. R. Statist. Soc. B* 32, 115-122): V* = V (sqrt n + 0.155 + 0.24 / sqrt n). It does not
    depend on the cell where the circle of digits is cut. On cells the continuous p-value is far too
    large, and there is no closed form: compare with 1.32 (95 %) and 1.58 (99 %), the quantiles
    for the law of the lead digit (Morrow 2014 gives 1.321 and 1.579, from memory).

    Parameters
    ----------
    counts : array (..., K)
        Amounts in each cell, whole numbers, cells in their order on the circle.
    p : array (K,) or (..., K)
        Reference shares, sum 1.

    Returns
    -------
    float64 array (...)
        NaN where the tally is empty.

    Raises
    ------
    ValueError
        If counts or p is outside its range.
    """
    c, n, law = checked(counts, p)
    n = nan_if_empty(n)
    gap = np.cumsum(c / n[..., np.newaxis] - law, axis=-1)
    gap[..., -1] = np.where(np.isnan(n), np.nan, 0.0)  # both end at 1; drop the rounding
    root = np.sqrt(n)
    v = gap.max(axis=-1) - gap.min(axis=-1)
    return np.asarray(v * (root + 0.155 + 0.24 / root))


def watson_u2(counts: npt.ArrayLike, p: npt.ArrayLike) -> FloatArray:
    """Return Watson's U^2 for cells on a circle.

    With S_j the cumulated excess counts, U^2 = sum p_j (S_j - sum p S)^2 / n, the integral of
    Watson's statistic (1961, *Biometrika* 48, 109-114) over the cells' own law. Choulakian,
    Lockhart & Stephens (1994, *Canad. J. Statist.* 22, 125-137) write N for n, o_j for c_j, e_j
    for n p_j and Z_j for S_j. It does not depend on where the circle is cut. No closed form of p:
    compare with 0.195 (95 %) and 0.292 (99 %), the quantiles for the law of the lead digit in
    large tallies. Arguments and errors as ``kuiper``.
    """
    c, n, law = checked(counts, p)
    n = nan_if_empty(n)
    excess = np.cumsum(c - n[..., np.newaxis] * law, axis=-1)
    centre = (law * excess).sum(axis=-1, keepdims=True)
    return np.asarray((law * (excess - centre) ** 2).sum(axis=-1) / n)


def z_scores(counts: npt.ArrayLike, p: npt.ArrayLike) -> FloatArray:
    """Return each cell's deviation in standard deviations, float64 (..., K).

    (|c - np| - 1/2) / sqrt(np (1-p)) with the sign of c - np, and 0 within half a count: Yates's
    continuity correction (1934, *Suppl. J. R. Statist. Soc.* 1, 217-235), as is usual for digits
    and on the side of caution. Infinite where a cell with p = 0 was hit; arguments and errors as
    ``chi_square``.
    """
    c, n, law = checked(counts, p)
    n = nan_if_empty(n)[..., np.newaxis]
    deviation = c - n * law
    beyond = np.copysign(np.maximum(np.abs(deviation) - 0.5, 0.0), deviation)
    with np.errstate(divide="ignore", invalid="ignore"):
        z = beyond / np.sqrt(n * law * (1 - law))
    return np.asarray(np.where(beyond == 0, 0.0, z))


def holm(p_values: npt.ArrayLike) -> FloatArray:
    """Return Holm's step-down adjustment over the last axis.

    Holm (1979, *Scand. J. Statist.* 6, 65-70): the j-th smallest of m (his n) is multiplied by
    m + 1 - j, made monotone and cut at 1, so that the chance of any false call among the cells
    stays below the level.

    Parameters
    ----------
    p_values : array (..., m)
        0 to 1; NaN gives NaN.

    Returns
    -------
    float64 array (..., m)

    Raises
    ------
    ValueError
        If a value is outside 0 to 1.
    """
    p = np.asarray(p_values, dtype=np.float64)
    if np.any((p < 0) | (p > 1)):
        raise ValueError("p_values must be 0 to 1")
    order = np.argsort(p, axis=-1)
    steps = p.shape[-1] - np.arange(p.shape[-1])
    stepped = np.maximum.accumulate(np.take_along_axis(p, order, axis=-1) * steps, axis=-1)
    adjusted = np.empty_like(p)
    np.put_along_axis(adjusted, order, np.minimum(stepped, 1.0), axis=-1)
    return adjusted


def largest_z(counts: npt.ArrayLike, p: npt.ArrayLike) -> LargestZ:
    """Return the cell with the largest |z| and its Holm-adjusted p-value.

    The z are those of ``z_scores``, the adjustment is that of ``holm`` (1979) for the smallest
    p-value. For the law of the lead digit and 1000 amounts the largest |z| is below 2.72 in 95 %
    and below 3.21 in 99 % of honest looks. Arguments and errors as ``chi_square``.
    """
    z = z_scores(counts, p)
    empty = np.isnan(z).all(axis=-1)
    cell = np.argmax(np.where(np.isnan(z), 0.0, np.abs(z)), axis=-1)
    at_cell = np.take_along_axis(z, cell[..., np.newaxis], axis=-1)[..., 0]
    # The smallest of K p-values is multiplied by K.
    adjusted = np.minimum(1.0, z.shape[-1] * 2 * ndtr(-np.abs(at_cell)))
    return LargestZ(
        np.where(empty, -1, cell).astype(np.int64), np.asarray(at_cell), np.asarray(adjusted)
    )


def rayleigh(n: npt.ArrayLike, cosines: npt.ArrayLike, sines: npt.ArrayLike) -> SingleLook:
    """Return Rayleigh's test that the amounts are spread evenly on the circle.

    With R = hypot(sum cos, sum sin) / n the statistic is 2 n R^2 (Rayleigh 1880, *Phil. Mag.* (5)
    10, 73-78), nearly chi-square with two degrees. The p-value exp(-n R^2) is corrected for small
    n: exp(sqrt((1+2n)^2 - 4 n^2 R^2) - (1+2n)) (Greenwood & Durand 1955, *Ann. Math. Statist.* 26,
    233-246, in the form of Zar, *Biostatistical Analysis*, from memory), good to three decimals
    from n = 10 on. With sums of cos and sin of 2 pi h times the circle it is the same test of the
    h-th harmonic.

    Parameters
    ----------
    n : array (...)
        Number of amounts.
    cosines, sines : array (...)
        Sums of cos and sin of 2 pi times ``circle(amount)``; each -n to n.

    Returns
    -------
    SingleLook
        Arrays (...); NaN where n is 0.

    Raises
    ------
    ValueError
        If n is not a whole number from 0 to 2**53, or the sums are longer than n.
    """
    count = checked_total(n)
    length = np.hypot(np.asarray(cosines, dtype=np.float64), np.asarray(sines, dtype=np.float64))
    if not np.all(length <= count * (1 + 1e-9) + 1e-9):
        raise ValueError("cosines and sines must be sums of n unit vectors, so no longer than n")
    count = nan_if_empty(count)
    length = np.minimum(length, count)
    whole = 1 + 2 * count
    # The same as the formula above, without the difference of two near numbers.
    log_p = -4 * length**2 / (np.sqrt(whole**2 - 4 * length**2) + whole)
    return SingleLook(np.asarray(2 * length**2 / count), np.asarray(np.exp(log_p)))


def _chi_square_test(statistic: FloatArray, law: FloatArray) -> SingleLook:
    degrees = np.count_nonzero(law > 0, axis=-1) - 1
    # With a single possible cell nothing can deviate but to infinity.
    p_value = np.where(degrees > 0, chdtrc(np.maximum(degrees, 1), statistic), statistic == 0)
    return SingleLook(
        np.asarray(statistic), np.asarray(np.where(np.isnan(statistic), np.nan, p_value))
    )
