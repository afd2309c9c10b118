"""Evidence against a reference over a stream's whole life, valid however often one looks.

An e-process: under the reference its expectation is 1 at every time, so the chance that it ever
reaches x is at most 1/x (Ville 1939). It gathers slowly after a change; it is no change detector.

All is done in logarithms. The differences of log-gammas leave an absolute error of ln E within
``4e-16 n ln n`` for n amounts: 1e-6 at 10**8, 0.01 at 10**12.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import numpy.typing as npt
from scipy.special import gammaln, logsumexp, xlogy

from service.digits.significand import BoolArray, FloatArray
from service.digits.tally import checked

CONCENTRATIONS: dict[str, tuple[float, ...]] = {
    "lead_digit": (20.0, 200.0, 2000.0),
    "lead_pair": (50.0, 500.0, 5000.0),
    "tail_pair": (50.0, 500.0, 5000.0),
}
"""Per view the kappas averaged over: small ones suit gross deviations, large ones slight."""


def log_evidence(
    counts: npt.ArrayLike, p: npt.ArrayLike, concentrations: Sequence[float]
) -> FloatArray:
    """Return ln E of the Dirichlet-mixture e-process against a reference.

    Per kappa, with alpha = kappa p: ln B(alpha + c) - ln B(alpha) - sum c ln p, where B is the
    multivariate beta function; E is averaged over the kappas. Lindon & Malek (2022,
    *Anytime-valid inference for multinomial count data*, NeurIPS 35) write theta_0 for our p, S
    for our counts c and alpha_0 for our kappa p.

    Parameters
    ----------
    counts : array (..., K)
        Amounts in each cell since the stream began, whole numbers.
    p : array (K,) or (..., K)
        Reference shares, sum 1, fixed before the first amount was counted.
    concentrations : sequence of float
        The kappas, above 0; for a watched view ``CONCENTRATIONS[view]``.

    Returns
    -------
    float64 array (...)
        Natural logarithm; 0 where nothing is counted (E = 1), inf where a cell with p = 0 was hit.

    Raises
    ------
    ValueError
        If an argument is outside its range.
    """
    c, n, law = checked(counts, p)
    log_mixture = _log_mixture(c, n, law, concentrations)
    return np.asarray(log_mixture - _log_likelihood(c, law))


def tolerant_log_evidence(
    counts: npt.ArrayLike,
    p: npt.ArrayLike,
    bounds: npt.ArrayLike,
    concentrations: Sequence[float],
) -> FloatArray:
    """Return ln E against every law whose cells stay within their bounds.

    The same mixture divided by the likelihood maximised over the null, which is reached at
    min(bound, s c) with s such that the sum is 1. E is at most that against the true law, so its
    expectation is at most 1 whichever law of the null is true: the universal inference of
    Wasserman, Ramdas & Balakrishnan (2020, *PNAS* 117, 16880-16890), with the mixture in the place
    of their alternative and {q : q <= bounds, sum q = 1} as their Theta_0.

    Parameters
    ----------
    counts, p, concentrations
        As in ``log_evidence``; p is the centre of the mixture.
    bounds : array (K,) or (..., K)
        Upper bounds of the cells' shares, each at least p.

    Returns
    -------
    float64 array (...)

    Raises
    ------
    ValueError
        If an argument is outside its range.
    """
    c, n, law = checked(counts, p)
    upper = np.asarray(bounds, dtype=np.float64)
    if upper.ndim < 1 or upper.shape[-1] != c.shape[-1] or not np.all(upper >= law):
        raise ValueError("bounds must have a value for each cell, at least its p")
    best = _most_likely(c, np.broadcast_to(np.minimum(upper, 1.0), c.shape))
    return np.asarray(_log_mixture(c, n, law, concentrations) - _log_likelihood(c, best))


def e_value(log_e: npt.ArrayLike) -> FloatArray:
    """Return E from ln E, cut at the largest finite float so that it can be written as JSON.

    Parameters
    ----------
    log_e : array (...)
        Natural logarithms, infinities included.

    Raises
    ------
    ValueError
        If a value is NaN.
    """
    log = _checked_logs(log_e, "log_e")
    return np.asarray(np.exp(np.minimum(log, np.log(np.finfo(np.float64).max))))


def p_value(max_log_e: npt.ArrayLike) -> FloatArray:
    """Return min(1, 1 / max E), valid at whatever time one stops (Ville's inequality, 1939).

    Parameters
    ----------
    max_log_e : array (...)
        The largest ln E so far. An earlier or smaller one is valid too, and weaker.

    Raises
    ------
    ValueError
        If a value is NaN.
    """
    return np.asarray(np.exp(-np.maximum(_checked_logs(max_log_e, "max_log_e"), 0.0)))


def e_bh(log_e: npt.ArrayLike, fdr: float) -> BoolArray:
    """Return which of n streams to flag, so that few of those flagged are honest: e-BH.

    Wang & Ramdas (2022, *False discovery rate control with e-values*, *J. R. Statist. Soc. B* 84,
    822-852): with e_[k] the k-th largest of their K = n e-values and alpha = ``fdr``, flag the k^
    largest, ``k^ = max {k : k e_[k] / K >= 1 / alpha}``. If each honest stream's E has an
    expectation of at most 1, the expected share of honest streams among those flagged (0 when
    none is) is at most ``fdr`` times the share of honest streams among all, however the e-values
    depend on each other. It holds for one look at all streams together.

    Equal values are flagged together or not at all. Compared are logarithms, so a value within
    rounding (1e-15, relative) of its limit may fall on either side.

    Parameters
    ----------
    log_e : array (n,)
        ln E of each stream; infinities are ordinary values, n may be 0.
    fdr : float
        False discovery rate, above 0 and at most 1.

    Returns
    -------
    bool array (n,)

    Raises
    ------
    ValueError
        If an argument is outside its range.
    """
    log = _checked_logs(log_e, "log_e")
    if log.ndim != 1:
        raise ValueError(f"log_e must have one axis, one value a stream, got {log.shape}")
    if not 0 < fdr <= 1:
        raise ValueError(f"fdr must be above 0 and at most 1, got {fdr}")
    if not log.size:
        return np.zeros(0, dtype=np.bool_)
    limit = np.log(log.size) - np.log(fdr) - np.log(np.arange(1, log.size + 1))
    enough = np.flatnonzero(np.sort(log)[::-1] >= limit)
    if not enough.size:
        return np.zeros(log.size, dtype=np.bool_)
    return np.asarray(log >= limit[enough[-1]])


def _checked_logs(values: npt.ArrayLike, name: str) -> FloatArray:
    logs = np.asarray(values, dtype=np.float64)
    if np.any(np.isnan(logs)):
        raise ValueError(f"{name} must be natural logarithms, -inf to inf, got NaN")
    return logs


def _log_mixture(
    c: FloatArray, n: FloatArray, law: FloatArray, concentrations: Sequence[float]
) -> FloatArray:
    """Return the log probability of one order of the counts, averaged over the Dirichlets."""
    kappas = np.asarray(concentrations, dtype=np.float64)
    if kappas.ndim != 1 or not kappas.size or not np.all((kappas > 0) & np.isfinite(kappas)):
        raise ValueError("concentrations must be one or more finite values above 0")
    parts = []
    for kappa in kappas:
        # An impossible cell (p = 0) has no share of the Dirichlet; if hit, the likelihood
        # under the reference is 0 and decides alone.
        alpha = np.where(law > 0, kappa * law, 1.0)
        grown = np.where(law > 0, gammaln(alpha + c) - gammaln(alpha), 0.0)
        parts.append(grown.sum(axis=-1) - gammaln(kappa + n) + gammaln(kappa))
    return np.asarray(logsumexp(np.stack(parts), axis=0) - np.log(kappas.size))


def _log_likelihood(c: FloatArray, shares: FloatArray) -> FloatArray:
    return np.asarray(xlogy(c, shares).sum(axis=-1))


def _most_likely(c: FloatArray, upper: FloatArray) -> FloatArray:
    """Return the law under the bounds that makes the counts most likely: min(upper, s c)."""
    with np.errstate(divide="ignore"):
        ratio = np.where(c > 0, upper / np.where(c > 0, c, 1.0), np.inf)
    order = np.argsort(ratio, axis=-1)
    ratio = np.take_along_axis(ratio, order, axis=-1)
    capped = np.cumsum(np.take_along_axis(np.where(c > 0, upper, 0.0), order, axis=-1), axis=-1)
    counted = np.take_along_axis(c, order, axis=-1)
    # With the cells before j at their bounds, the others share what is left in proportion to c.
    left = 1 - np.concatenate([np.zeros_like(capped[..., :1]), capped[..., :-1]], axis=-1)
    rest = np.cumsum(counted[..., ::-1], axis=-1)[..., ::-1]
    s = np.divide(left, rest, out=np.full_like(left, np.inf), where=rest > 0)
    fits = (s <= ratio) & (rest > 0)
    first = np.argmax(fits, axis=-1)[..., np.newaxis]
    scale = np.take_along_axis(s, first, axis=-1)
    bounded = np.minimum(upper, np.where(np.isfinite(scale), scale, 0.0) * c)
    # Bounds of the cells that were hit sum to less than 1: each is as likely as it may be.
    return np.asarray(np.where(fits.any(axis=-1, keepdims=True), bounded, upper))
