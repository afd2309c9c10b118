"""How far a tally is from its reference, with what sampling noise alone explains taken off.

The mean absolute deviation (MAD) of the shares is the field's usual measure. A raw MAD means
nothing without the count: a perfect merchant's is above 0.015 on average below 245 amounts.
"""

from __future__ import annotations

import math
from typing import Any, NamedTuple

import numpy as np
import numpy.typing as npt
from scipy.special import gammaln

from service.digits.compiled import compiled
from service.digits.significand import FloatArray
from service.digits.tally import checked, checked_law, checked_total, nan_if_empty

CUT_OFFS: dict[str, tuple[float, float, float]] = {
    "lead_digit": (0.006, 0.012, 0.015),
    "second_digit": (0.008, 0.010, 0.012),
    "lead_pair": (0.0012, 0.0018, 0.0022),
}
"""Raw MAD up to which a view is close, acceptable, marginal (Nigrini 2012, from memory)."""

CUT_OFF_SOURCE = "Nigrini, Benford's Law, Wiley 2012 (figures from memory)"

BANDS = ("close", "acceptable", "marginal", "off")
"""Names of the bands below, between and above the three cut-offs; the wording is ours."""

WORST_EXCESS_MAD = 0.030
"""Noise-free MAD of the lead digit at which the score reaches 0."""

# The 95 % quantile of noise alone is about its mean plus 1.645 standard deviations, those being at
# most 0.603 / (K sqrt n) (half-normal deviations); 1.05 instead of 0.99 makes up for the skew.
_BAND_ROOM = 1.05

_Z95 = 1.959963984540054  # normal quantile of 0.975


class Estimate(NamedTuple):
    """A value with its 95 % interval: float64 arrays of one shape, NaN where nothing is counted."""

    value: FloatArray
    low: FloatArray
    high: FloatArray


def mad(counts: npt.ArrayLike, p: npt.ArrayLike) -> FloatArray:
    """Return the mean absolute deviation of the shares from their reference, mean |c/n - p|.

    The measure of Drake & Nigrini (2000, *J. Account. Educ.* 18, 127-146). Nigrini (2012) writes
    AP for the counted share c/n, EP for p and K for the number of cells (from memory).

    Parameters
    ----------
    counts : array (..., K)
        Amounts in each cell, whole numbers.
    p : array (K,) or (..., K)
        Reference shares, sum 1.

    Returns
    -------
    float64 array (...)
        0 to 2/K; NaN where the tally is empty.

    Raises
    ------
    ValueError
        If counts or p is outside its range.
    """
    c, n, law = checked(counts, p)
    return _mad(c, n, law)


def mad_expected(n: npt.ArrayLike, p: npt.ArrayLike) -> FloatArray:
    """Return the mean MAD of n independent amounts that follow the reference, exactly.

    De Moivre's closed form of the mean absolute deviation of a binomial share (Diaconis & Zabell
    1991, *Statistical Science* 6, 284-302), E|X/n - p| = 2 p (1-p) b(floor(np); n-1, p), with
    b the binomial probability, averaged over the cells. For large n it is ``c / sqrt(n)``
    with c = ``noise_constant(p)``.

    Parameters
    ----------
    n : array (...)
        Total counts; whole numbers from 0 to 2**53.
    p : array (K,) or (..., K)
        Reference shares, sum 1.

    Returns
    -------
    float64 array (...)
        NaN where n is 0.

    Raises
    ------
    ValueError
        If n or p is outside its range.
    """
    total = checked_total(n)[..., np.newaxis]
    law = checked_law(p)
    trials = np.maximum(total - 1, 0)
    mode = np.minimum(np.floor(total * law), trials)
    cells = 2 * law * (1 - law) * np.exp(_log_binomial(mode, trials, law))
    return np.asarray(np.where(total > 0, cells, np.nan).mean(axis=-1))


def noise_constant(p: npt.ArrayLike) -> FloatArray:
    """Return c = mean sqrt(2 p (1-p) / pi), so that noise alone gives a MAD of c / sqrt(n).

    The mean of a half-normal deviation in each cell, De Moivre's limit of ``mad_expected``; 0.2348
    for the law of the lead digit. ``p`` is (K,) or (..., K), shares with sum 1, or ValueError; the
    result is (...).
    """
    return _noise_constant(checked_law(p))


def excess_mad(counts: npt.ArrayLike, p: npt.ArrayLike) -> Estimate:
    """Return the MAD less what sampling noise explains, xMAD = sqrt(max(0, MAD^2 - c^2/n)).

    Barney & Schulzke (2016, *J. Forensic Account. Res.* 1, A66-A90, from memory) take the expected
    MAD off the MAD itself. Squares are taken off squares here, as independent errors add, which
    leaves a clear deviation nearly whole.

    The interval is for the population's MAD, the mean of |q - p| over the cells when the cells'
    true shares are q, and holds whatever q is. One amount moves the MAD by at most 2/(Kn), so by
    the Efron-Stein inequality (1981, *Ann. Statist.* 9, 586-596) its standard deviation is at most
    s = 1/(K sqrt n). Its mean lies between the population's MAD (Jensen) and that plus c_q/sqrt n
    (triangle inequality), with c_q the noise constant of the counted shares. Hence

        low = MAD - c_q/sqrt n - 1.96 s,   high = MAD + 1.96 s,

    cut to 0 and 2/K. Only the normal 1.96 is approximate. The interval is wider than it has to be:
    simulated on seven laws and 30 to 10 000 amounts, each end missed at most 1.4 % of the time. It
    is for one look, not for all looks together.

    Parameters
    ----------
    counts : array (..., K)
        Amounts in each cell, whole numbers.
    p : array (K,) or (..., K)
        Reference shares, sum 1.

    Returns
    -------
    Estimate
        Arrays (...), each 0 to 2/K with low <= value <= high; NaN where the tally is empty.

    Raises
    ------
    ValueError
        If counts or p is outside its range.
    """
    c, n, law = checked(counts, p)
    found = _excess_mad(_rows(c), _rows(np.broadcast_to(law, c.shape)), _Z95)
    return Estimate(*found.reshape(3, *n.shape))


def excess_mad_of_rows(counts: npt.NDArray[np.int64], law: FloatArray) -> Estimate:
    """Return many tallies' ``excess_mad`` against one law; what is given is taken as it is.

    Parameters
    ----------
    counts : int64 array (n, K)
    law : float64 array (K,)
    """
    return Estimate(*_excess_mad(_rows(counts), _rows(np.broadcast_to(law, counts.shape)), _Z95))


def _rows(values: npt.NDArray[Any]) -> FloatArray:
    """Return an array as one row a tally, of the one type that the loop is compiled for."""
    return np.array(values, np.float64, order="C").reshape(-1, values.shape[-1])


@compiled
def _excess_mad(counts: Any, law: Any, z95: float) -> FloatArray:
    rows, cells = counts.shape
    found = np.full((3, rows), np.nan)
    for i in range(rows):
        n = 0.0
        for k in range(cells):
            n += counts[i, k]
        if n == 0:
            continue
        raw, noise, counted = 0.0, 0.0, 0.0
        for k in range(cells):
            p, q = law[i, k], counts[i, k] / n
            raw += abs(q - p)
            noise += math.sqrt(2 / math.pi * p * (1 - p))
            counted += math.sqrt(2 / math.pi * q * (1 - q))
        raw, noise, counted = raw / cells, noise / cells, counted / cells
        root = math.sqrt(n)
        margin = z95 / (cells * root)
        value = min(math.sqrt(max(0.0, raw**2 - noise**2 / n)), 2 / cells)
        low = max(0.0, raw - counted / root - margin)
        # The reference's noise can exceed that of the counted shares; the value stays inside.
        found[0, i], found[1, i] = value, min(low, value)
        found[2, i] = min(raw + margin, 2 / cells)
    return found


def misfit(counts: npt.ArrayLike, p: npt.ArrayLike) -> Estimate:
    """Return the share of amounts that would have to differ to match the reference, 0 to 1.

    Total variation distance with sampling noise removed, K/2 times ``excess_mad``; arguments,
    interval and errors as there.
    """
    return misfit_of(excess_mad(counts, p), np.shape(counts)[-1])


def misfit_of(excess: Estimate, cells: int) -> Estimate:
    """Return the misfit that belongs to an ``excess_mad`` on K = ``cells`` cells, 2 or more."""
    if not cells >= 2:
        raise ValueError(f"cells must be at least 2, got {cells}")
    half = cells / 2
    return Estimate(excess.value * half, excess.low * half, np.minimum(excess.high * half, 1.0))


def score(counts: npt.ArrayLike, p: npt.ArrayLike) -> Estimate:
    """Return the score of a lead digit tally, 0 (far from its reference) to 100 (matches it).

    ``100 max(0, 1 - xMAD / 0.030)``: 80, 60 and 50 are the published cut-offs 0.006, 0.012 and
    0.015 (Nigrini 2012, from memory) freed of noise. Arguments, interval and errors as in
    ``excess_mad``.
    """
    return score_of(excess_mad(counts, p))


def score_of(excess: Estimate) -> Estimate:
    """Return the score that belongs to an ``excess_mad`` of the lead digit."""
    value, low, high = 100 * np.maximum(0, 1 - np.stack(excess) / WORST_EXCESS_MAD)
    return Estimate(value, high, low)


def band(view: str, counts: npt.ArrayLike, p: npt.ArrayLike) -> npt.NDArray[np.object_]:
    """Return the published band of a tally's raw MAD where the count lets it mean anything.

    The cut-offs (Nigrini 2012, from memory) were made for large tallies of the law. They are given
    only where the 95 % quantile of noise alone, about ``mad_expected + 1.05 / (K sqrt n)``, is
    within the first of them (from some 3400 amounts for the lead digit, 1900 for the second digit,
    5800 for the lead pair), so that at most one honest stream in twenty is read as worse than
    close.

    Parameters
    ----------
    view : str
        ``lead_digit``, ``second_digit`` or ``lead_pair``.
    counts : array (..., K)
        Amounts in each cell of the view, whole numbers.
    p : array (K,)
        The law of the view; a band has no meaning against another reference.

    Returns
    -------
    object array (...)
        A name of ``BANDS``, or None where the count is too small.

    Raises
    ------
    ValueError
        If view, counts or p is outside its range.
    """
    if view not in CUT_OFFS:
        raise ValueError(f"view must be one of {', '.join(CUT_OFFS)}, got {view!r}")
    c, n, law = checked(counts, p)
    cut_offs = CUT_OFFS[view]
    raw = _mad(c, n, law)
    step = np.searchsorted(cut_offs, np.nan_to_num(raw))
    names: npt.NDArray[np.object_] = np.asarray(np.array(BANDS, dtype=np.object_)[step], np.object_)
    noise = mad_expected(n, law) + _BAND_ROOM / (c.shape[-1] * np.sqrt(nan_if_empty(n)))
    readable = noise <= cut_offs[0]
    names[~readable] = None
    return names


def spread(n: npt.ArrayLike, total: npt.ArrayLike, squares: npt.ArrayLike) -> FloatArray:
    """Return the sample standard deviation of log10(amount), in decades, from its sums.

    Sums kept row by row lose digits: each is right within ``1.1e-16 n``, relative, so that equal
    amounts may at worst show a spread of some ``1e-8 sqrt(n)`` times their log10.

    Parameters
    ----------
    n : array (...)
        Number of amounts.
    total : array (...)
        Sum of log10(amount).
    squares : array (...)
        Sum of log10(amount) squared.

    Returns
    -------
    float64 array (...)
        At least 0; NaN where n is below 2.

    Raises
    ------
    ValueError
        If n is not a whole number from 0 to 2**53, or a sum is not finite.
    """
    count = checked_total(n)
    y = np.asarray(total, dtype=np.float64)
    y2 = np.asarray(squares, dtype=np.float64)
    if not (np.all(np.isfinite(y)) and np.all(np.isfinite(y2))):
        raise ValueError("total and squares must be finite sums")
    safe = np.where(count > 1, count, np.nan)
    within = y2 - y**2 / safe
    return np.asarray(np.sqrt(np.maximum(0, within) / (safe - 1)))


def _mad(counts: FloatArray, n: FloatArray, law: FloatArray) -> FloatArray:
    shares = counts / nan_if_empty(n)[..., np.newaxis]
    return np.asarray(np.abs(shares - law).mean(axis=-1))


def _noise_constant(shares: FloatArray) -> FloatArray:
    return np.asarray(np.sqrt(2 / np.pi * shares * (1 - shares)).mean(axis=-1))


def _log_binomial(k: FloatArray, n: FloatArray, p: FloatArray) -> FloatArray:
    """Return ln of the binomial probability of k of n, for k within a few counts of np.

    Loader's saddle-point form (*Fast and accurate computation of binomial probabilities*, 2000):
    differences of log-gamma lose six digits at n = 10**9, this loses none.
    """
    with np.errstate(divide="ignore", invalid="ignore"):
        inner = (
            _stirling_error(n)
            - _stirling_error(k)
            - _stirling_error(n - k)
            - _deviance(k, n * p)
            - _deviance(n - k, n * (1 - p))
            + 0.5 * np.log(n / (2 * np.pi * k * (n - k)))
        )
        none = np.where(n > 0, n * np.log1p(-p), 0.0)
        every = np.where(n > 0, n * np.log(p), 0.0)
    return np.asarray(np.where(k <= 0, none, np.where(k >= n, every, inner)))


def _stirling_error(n: FloatArray) -> FloatArray:
    """Return ln n! less Stirling's formula."""
    large = np.maximum(n, 16.0)
    square = large**2
    series = (
        1 / 12 - (1 / 360 - (1 / 1260 - (1 / 1680 - 1 / 1188 / square) / square) / square) / square
    ) / large
    small = np.clip(n, 1.0, 16.0)
    direct = gammaln(small + 1) - (small + 0.5) * np.log(small) + small - 0.5 * np.log(2 * np.pi)
    return np.asarray(np.where(n >= 16, series, direct))


def _deviance(k: FloatArray, mean: FloatArray) -> FloatArray:
    """Return k ln(k/mean) + mean - k without cancellation."""
    relative = (mean - k) / k
    return np.asarray(k * (relative - np.log1p(relative)))
