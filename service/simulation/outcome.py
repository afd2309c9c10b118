"""What simulated streams say about a policy: run lengths between false alarms, and delays."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np
from scipy.special import chdtri, pdtrc

from service.digits.significand import FloatArray, IntArray

WITHIN = (10, 30, 100, 300, 1000, 3000, 10_000, 30_000)
"""Rows after the change at which the share found is told."""

REFUTED_AT = 0.01
"""Chance that a stream which keeps the promise exactly is counted as surely below it."""


@dataclass(frozen=True)
class RunLength:
    """False alarms of honest rows whose reference was decided.

    Attributes
    ----------
    rows, alarms : int
        Over all streams; rows of a baseline being learned do not count.
    mean : float or None
        Rows per alarm: what the promise is about (alarms in any n rows at most n / A). Runs that
        the simulation cut off count with the rows they had. None without an alarm.
    standard_error : float or None
        From the scatter of alarms between streams, but no less than Poisson's.
    low, high : float
        95 % interval: Poisson's exact one (Garwood 1936, *Biometrika* 28), widened by the scatter
        between streams. high is None without an alarm.
    streams : int
        Streams with at least A such rows; the next two are among them.
    reaching : float or None
        Share of those streams with at most one alarm every A rows.
    refuted : float or None
        Share of those with so many alarms that a stream at exactly one in A has them with
        probability below 1 %.
    """

    rows: int
    alarms: int
    mean: float | None
    standard_error: float | None
    low: float
    high: float | None
    streams: int
    reaching: float | None
    refuted: float | None


def run_length(rows: IntArray, alarms: IntArray, threshold: float) -> RunLength:
    """Summarise honest rows and false alarms per stream.

    Parameters
    ----------
    rows, alarms : int64 arrays (streams,)
    threshold : float
        The policy's transactions per false alarm A.
    """
    total, count = int(rows.sum()), int(alarms.sum())
    spread = _scatter(rows, alarms)
    low = 2 * total / (spread * float(chdtri(2 * count / spread + 2, 0.025)))
    enough = rows >= threshold
    expected, seen = rows[enough] / threshold, alarms[enough]
    return RunLength(
        rows=total,
        alarms=count,
        mean=total / count if count else None,
        standard_error=total / count * math.sqrt(spread / count) if count else None,
        low=low,
        high=2 * total / (spread * float(chdtri(2 * count / spread, 0.975))) if count else None,
        streams=int(enough.sum()),
        reaching=float((seen <= expected).mean()) if enough.any() else None,
        # pdtrc(k, m) is P(X > k)
        refuted=(
            float((pdtrc(np.maximum(seen - 1.0, 0), expected) < REFUTED_AT)[seen > 0].sum())
            / int(enough.sum())
            if enough.any()
            else None
        ),
    )


def _scatter(rows: IntArray, alarms: IntArray) -> float:
    """Return how many times more alarms scatter between streams than Poisson's law, at least 1."""
    seen = rows > 0
    if int(seen.sum()) < 2 or not int(alarms.sum()):
        return 1.0
    expected = rows[seen] * (float(alarms.sum()) / float(rows.sum()))
    return max(float(((alarms[seen] - expected) ** 2 / expected).sum()) / (int(seen.sum()) - 1), 1)


@dataclass(frozen=True)
class Delay:
    """Rows from the change to the next alarm, the alarm's row included.

    Attributes
    ----------
    streams : int
    limit : int
        Rows simulated after the change; a change not found in them counts as longer.
    found : float
        Share found within the limit.
    mean : float
        With streams not found counted at the limit: a lower bound unless all were found.
    standard_error : float
        Of ``mean``.
    median, ninety : int or None
        Rows within which half and 90 % were found; None where the limit was too short.
    found_within : list of (int, float, float)
        Rows, share found within them, and its standard error.
    """

    streams: int
    limit: int
    found: float
    mean: float
    standard_error: float
    median: int | None
    ninety: int | None
    found_within: list[tuple[int, float, float]]


def delay(rows: FloatArray, limit: int) -> Delay:
    """Summarise delays.

    Parameters
    ----------
    rows : float64 array (streams,)
        Delays, infinite where the change was not found.
    limit : int
    """
    n = len(rows)
    held = np.minimum(rows, limit)
    ordered = np.sort(rows)

    def reached(share: float) -> int | None:
        value = float(ordered[math.ceil(share * n) - 1])
        return int(value) if math.isfinite(value) else None

    within = []
    for rows_after in sorted({*(w for w in WITHIN if w < limit), limit}):
        share = float((rows <= rows_after).mean())
        within.append((rows_after, share, math.sqrt(share * (1 - share) / n)))
    return Delay(
        streams=n,
        limit=limit,
        found=float(np.isfinite(rows).mean()),
        mean=float(held.mean()),
        standard_error=float(held.std(ddof=1) / math.sqrt(n)) if n > 1 else math.nan,
        median=reached(0.5),
        ninety=reached(0.9),
        found_within=within,
    )


@dataclass(frozen=True)
class HonestRows:
    """What honest rows of many streams led to.

    Attributes
    ----------
    false_alarms : RunLength
    references : dict of dict
        Share of the streams that compare a view with ``law`` or ``own``, or are still
        ``learning``: by view, at the end of these rows.
    guarantee : dict
        Share of the streams of which the service says that the promise's condition ``holds``, is
        ``doubtful`` or ``void``.
    bounds_hold : float or None
        Share of the streams in which no cell's true probability exceeds its stated bound, so that
        the promise's condition holds. None where the pattern's rows are not independent.
    false_alarms_where_bounds_hold : RunLength or None
        Of those streams.
    """

    false_alarms: RunLength
    references: dict[str, dict[str, float]]
    guarantee: dict[str, float]
    bounds_hold: float | None
    false_alarms_where_bounds_hold: RunLength | None


@dataclass(frozen=True)
class Result:
    """Outcome of one simulation.

    Attributes
    ----------
    honest : HonestRows
        Of all rows, or, with a fraud, of the rows before the change.
    delay : Delay or None
    """

    honest: HonestRows
    delay: Delay | None

    def document(self) -> dict[str, Any]:
        """Return the outcome as a JSON-ready mapping; what is not a number becomes None."""
        document: dict[str, Any] = finite(asdict(self))
        return document


def finite(value: Any) -> Any:
    """Return the value with None in place of every number that JSON cannot write."""
    if isinstance(value, dict):
        return {k: finite(v) for k, v in value.items()}
    if isinstance(value, Sequence) and not isinstance(value, str):
        return [finite(v) for v in value]
    return None if isinstance(value, float) and not math.isfinite(value) else value
