"""Every measure once more, from digit strings, by other people's libraries and plain loops.

Nothing here uses the service's code, nor arithmetic on amounts: digits are read off the text.
"""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Sequence
from decimal import Decimal
from functools import cache
from typing import Any

import mpmath
import numpy as np
from scipy import optimize, stats
from statsmodels.stats.multitest import multipletests
from statsmodels.stats.proportion import proportions_ztest

CELLS = {
    "lead_digit": [str(d) for d in range(1, 10)],
    "second_digit": [str(d) for d in range(10)],
    "lead_pair": [str(d) for d in range(10, 100)],
    "tail_pair": [f"{d:02d}" for d in range(100)],
}
KAPPAS = {
    "lead_digit": (20, 200, 2000),
    "lead_pair": (50, 500, 5000),
    "tail_pair": (50, 500, 5000),
}
LARGEST = 1.7e308

Counts = tuple[int, ...]


def digits_of(amount: int | str, places: int) -> str:
    """Return the minor units of an amount as text: integers are, decimal strings are shifted."""
    if isinstance(amount, int):
        return str(abs(amount))
    return str(int(Decimal(amount).scaleb(places).to_integral_exact()))


def cell(view: str, digits: str) -> str | None:
    """Return the cell of one amount; None where the view does not see it."""
    if digits == "0":
        return None
    if view == "lead_digit":
        return digits[0]
    if view == "tail_pair":
        return digits[-2:] if len(digits) >= 4 else None
    if len(digits) < 2:
        return None
    return digits[1] if view == "second_digit" else digits[:2]


def tally(view: str, amounts: Sequence[str]) -> Counts:
    """Count amounts in the cells of a view."""
    found = Counter(cell(view, digits) for digits in amounts)
    return tuple(found[name] for name in CELLS[view])


@cache
def law(view: str) -> list[float]:
    """Return the shares of a view's cells by the law, in 30 digits before they are rounded."""
    with mpmath.workdps(30):
        if view == "tail_pair":
            return [0.01] * 100
        if view == "second_digit":
            return [
                float(sum(mpmath.log10(1 + mpmath.mpf(1) / (10 * j + d)) for j in range(1, 10)))
                for d in range(10)
            ]
        return [float(mpmath.log10(1 + mpmath.mpf(1) / int(name))) for name in CELLS[view]]


@cache
def measures(view: str, counts: Counts) -> dict[str, Any]:
    """Return the classical measures of one view, in the names of the API."""
    p, n, k = law(view), sum(counts), len(counts)
    expected = np.array(p) * (n / sum(p))
    mad = math.fsum(abs(c / n - q) for c, q in zip(counts, p, strict=True)) / k
    noise = math.fsum(math.sqrt(2 * q * (1 - q) / math.pi) for q in p) / k
    own = math.fsum(math.sqrt(2 * c / n * (1 - c / n) / math.pi) for c in counts) / k
    excess = math.sqrt(max(0.0, mad**2 - noise**2 / n))
    margin = stats.norm.ppf(0.975) / (k * math.sqrt(n))
    z = [z_of(c, n, q) for c, q in zip(counts, p, strict=True)]
    most = int(np.argmax(np.abs(z)))
    holm = multipletests(2 * stats.norm.sf(np.abs(z)), method="holm")[1]
    chi_square = stats.chisquare(counts, expected)
    g = stats.power_divergence(counts, expected, lambda_="log-likelihood")
    low = min(max(0.0, mad - own / math.sqrt(n) - margin), excess)
    return {
        "count": n,
        "misfit": excess * k / 2,
        "misfit_low": low * k / 2,
        "misfit_high": min(1.0, min(mad + margin, 2 / k) * k / 2),
        "mad": mad,
        "mad_expected": _mad_expected(n, view),
        "chi_square": {"statistic": chi_square.statistic, "p_value": chi_square.pvalue},
        "g": {"statistic": g.statistic, "p_value": g.pvalue},
        "kuiper": _kuiper(counts, p),
        "watson_u2": _watson(counts, p),
        "largest_z": {"cell": CELLS[view][most], "z": z[most], "p_value": holm[most]},
    }


def score(counts: Counts) -> tuple[float, float, float]:
    """Return the score of lead digits and its interval."""
    found = measures("lead_digit", counts)
    far = (found["misfit"], found["misfit_high"], found["misfit_low"])
    value, low, high = (100 * max(0.0, 1 - one / 4.5 / 0.030) for one in far)
    return value, low, high


def z_of(count: int, n: int, share: float) -> float:
    """Return the z of a share as statsmodels does, half a count nearer to what is expected."""
    beyond = count - n * share
    if abs(beyond) <= 0.5:
        return 0.0
    nearer = count - math.copysign(0.5, beyond)
    return float(proportions_ztest(nearer, n, value=share, prop_var=share)[0])


@cache
def _mad_expected(n: int, view: str) -> float:
    """Return the mean of the MAD by summing over the binomial laws."""
    total = []
    for q in law(view):
        middle, reach = n * q, 14 * math.sqrt(n * q * (1 - q)) + 14
        x = np.arange(max(0, int(middle - reach)), min(n, int(middle + reach)) + 1)
        total.append(float((stats.binom.pmf(x, n, q) * np.abs(x / n - q)).sum()))
    return math.fsum(total) / len(total)


def _kuiper(counts: Counts, p: list[float]) -> float:
    n, gap, gaps = sum(counts), 0.0, [0.0]
    for c, q in zip(counts[:-1], p[:-1], strict=True):
        gap += c / n - q
        gaps.append(gap)
    root = math.sqrt(n)
    return (max(gaps) - min(gaps)) * (root + 0.155 + 0.24 / root)


def _watson(counts: Counts, p: list[float]) -> float:
    n, excess, so_far = sum(counts), 0.0, []
    for c, q in zip(counts, p, strict=True):
        excess += c - n * q
        so_far.append(excess)
    centre = math.fsum(q * s for q, s in zip(p, so_far, strict=True))
    return math.fsum(q * (s - centre) ** 2 for q, s in zip(p, so_far, strict=True)) / n


@cache
def log_e(view: str, counts: Counts) -> mpmath.mpf:
    """Return ln of the Dirichlet-mixture e-value, gamma functions by mpmath."""
    p, n = law(view), sum(counts)
    with mpmath.workdps(30):
        parts = []
        for kappa in KAPPAS[view]:
            one = mpmath.loggamma(kappa) - mpmath.loggamma(kappa + n)
            for c, q in zip(counts, p, strict=True):
                if c:
                    alpha = mpmath.mpf(kappa) * q
                    one += mpmath.loggamma(alpha + c) - mpmath.loggamma(alpha) - c * mpmath.log(q)
            parts.append(one)
        return mpmath.log(mpmath.fsum(mpmath.exp(one) for one in parts) / len(parts))


@cache
def always_valid(count: int, n: int, cells: int) -> tuple[float, float]:
    """Return where the Beta mixture's ratio reaches cells / 0.05, by bisection."""

    def room(t: float) -> float:
        mixture = (
            math.lgamma(count + 0.5) + math.lgamma(n - count + 0.5) - math.lgamma(n + 1)
        ) - math.log(math.pi)
        likelihood = (count * math.log(t) if count else 0.0) + (
            (n - count) * math.log1p(-t) if count < n else 0.0
        )
        return mixture - likelihood - math.log(cells / 0.05)

    share, tiny = count / n, 1e-15
    low = optimize.brentq(room, tiny, share, xtol=1e-15, rtol=1e-13) if count else 0.0
    high = optimize.brentq(room, share or tiny, 1 - 1e-12, xtol=1e-15) if count < n else 1.0
    return low, high


@cache
def circle(amounts: tuple[str, ...]) -> dict[str, Any]:
    """Return Rayleigh's test of the logarithms' fractional parts, and their spread."""
    n = len(amounts)
    with mpmath.workdps(30):
        logs = np.array([float(mpmath.log10(int(digits))) for digits in amounts])
        turns = np.array(
            [float(2 * mpmath.pi * mpmath.frac(mpmath.log10(int(digits)))) for digits in amounts]
        )
    points = np.stack([np.cos(turns), np.sin(turns)], axis=1)
    length = float(stats.directional_stats(points).mean_resultant_length)
    whole = mpmath.mpf(1 + 2 * n)
    p_value = mpmath.exp(mpmath.sqrt(whole**2 - 4 * (mpmath.mpf(length) * n) ** 2) - whole)
    return {
        "count": n,
        "rayleigh": {"statistic": 2 * n * length**2, "p_value": float(p_value)},
        "spread": float(np.std(logs, ddof=1)),
    }
