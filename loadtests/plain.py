"""The plain in-house build: what a team would write first, working and pipelined.

marshmallow checks every row, a key with an expiry remembers every id, a hash a stream counts the
cells of three views, and each request answers with the scores of the streams that it touched:
chi-square and mean absolute deviation of each view. There are no windows, no baselines, no
detectors, no alarms; a crash between remembering ids and counting loses rows.

`create_app` takes the way to compute chi-square: ``"scipy"`` calls `scipy.stats.chisquare` for
every stream and view; ``"own"`` writes the formula out, for all streams of a request at once.
"""

from __future__ import annotations

import os
from collections import Counter
from typing import Any

import numpy as np
import redis
from flask import Flask, jsonify, request
from marshmallow import Schema, ValidationError, fields, validate
from scipy.special import chdtrc
from scipy.stats import chisquare

REMEMBERED = 8 * 24 * 3600  # seconds

LEAD_DIGITS = [f"lead_digit:{d}" for d in range(1, 10)]
LEAD_PAIRS = [f"lead_pair:{d}" for d in range(10, 100)]
TAIL_PAIRS = [f"tail_pair:{d:02d}" for d in range(100)]
CELLS = {name.encode(): i for i, name in enumerate(LEAD_DIGITS + LEAD_PAIRS + TAIL_PAIRS)}
VIEWS = {"lead_digit": slice(0, 9), "lead_pair": slice(9, 99), "tail_pair": slice(99, 199)}
EXPECTED = {
    "lead_digit": np.log10(1 + 1 / np.arange(1, 10)),
    "lead_pair": np.log10(1 + 1 / np.arange(10, 100)),
    "tail_pair": np.full(100, 0.01),
}


class Transaction(Schema):
    """One row."""

    id = fields.String(required=True, validate=validate.Length(1, 64))
    merchant = fields.String(
        required=True, validate=validate.Regexp(r"[A-Za-z0-9][A-Za-z0-9._:@+-]{0,63}\Z")
    )
    amount = fields.Integer(strict=True, required=True, validate=validate.Range(0, 10**15))
    currency = fields.String(required=True, validate=validate.Regexp(r"[A-Z]{3}\Z"))
    flow = fields.String(load_default="sale", validate=validate.Regexp(r"[a-z0-9_-]{1,16}\Z"))
    at = fields.AwareDateTime(format="iso", required=True)


class Batch(Schema):
    """A request's body."""

    transactions = fields.List(fields.Nested(Transaction), required=True)


def create_app(chi_square: str) -> Flask:
    """Make the application, over the store that ``TALLYWARD_REDIS_URL`` names."""
    app = Flask(__name__)
    store = redis.Redis.from_url(os.environ["TALLYWARD_REDIS_URL"])
    schema = Batch()
    scores = {"scipy": scores_by_scipy, "own": scores_by_formula}[chi_square]

    @app.post("/v1/batches")
    def post_batch() -> Any:
        try:
            rows = schema.load(request.get_json())["transactions"]
        except ValidationError as error:
            return jsonify(errors=error.messages), 422
        fresh = unseen(store, rows)
        streams, counts = count(store, fresh)
        found = scores(counts)
        return jsonify(
            accepted=len(fresh),
            duplicates=len(rows) - len(fresh),
            merchants=[
                {"merchant": m, "flow": f, "currency": c, "views": views}
                for (m, f, c), views in zip(streams, found, strict=True)
            ],
        )

    return app


def unseen(store: redis.Redis, rows: list[dict[str, Any]]) -> list[dict[str, Any]]:
    """Remember the rows' ids and return the rows whose id is new."""
    pipeline = store.pipeline(transaction=False)
    for row in rows:
        pipeline.set(f"seen:{row['merchant']}:{row['id']}", 1, nx=True, ex=REMEMBERED)
    return [row for row, new in zip(rows, pipeline.execute(), strict=True) if new]


def count(
    store: redis.Redis, rows: list[dict[str, Any]]
) -> tuple[list[tuple[str, str, str]], list[dict[bytes, bytes]]]:
    """Count the rows' digits; return the streams touched and all their counts."""
    added: dict[tuple[str, str, str], Counter[str]] = {}
    for row in rows:
        stream = row["merchant"], row["flow"], row["currency"]
        amount = row["amount"]
        cells = added.setdefault(stream, Counter())
        digits = str(amount)
        if amount > 0:
            cells[f"lead_digit:{digits[0]}"] += 1
            cells[f"lead_pair:{digits[:2].ljust(2, '0')}"] += 1
        if amount >= 1000:
            cells[f"tail_pair:{digits[-2:]}"] += 1
    pipeline = store.pipeline(transaction=False)
    for stream, cells in added.items():
        for cell, times in cells.items():
            pipeline.hincrby(key(stream), cell, times)
    for stream in added:
        pipeline.hgetall(key(stream))
    return list(added), pipeline.execute()[-len(added) :] if added else []


def key(stream: tuple[str, str, str]) -> str:
    """Return the name of a stream's counts."""
    return "counts:" + ":".join(stream)


def scores_by_scipy(counts: list[dict[bytes, bytes]]) -> list[dict[str, Any]]:
    """Score each view of each stream by SciPy."""
    scores = []
    for of_stream in counts:
        cells = np.zeros(len(CELLS))
        for name, times in of_stream.items():
            cells[CELLS[name]] = int(times)
        views = {}
        for view, part in VIEWS.items():
            observed, expected = cells[part], EXPECTED[view]
            n = observed.sum()
            if n > 0:
                test = chisquare(observed, n * expected)
                mad = np.abs(observed / n - expected).mean()
                views[view] = _score(n, test.statistic, test.pvalue, mad)
        scores.append(views)
    return scores


def scores_by_formula(counts: list[dict[bytes, bytes]]) -> list[dict[str, Any]]:
    """Score each view of all streams at once."""
    cells = np.zeros((len(counts), len(CELLS)))
    for row, of_stream in zip(cells, counts, strict=True):
        row[[CELLS[name] for name in of_stream]] = [*map(int, of_stream.values())]
    scores: list[dict[str, Any]] = [{} for _ in counts]
    for view, part in VIEWS.items():
        observed, expected = cells[:, part], EXPECTED[view]
        n = observed.sum(axis=1)
        some = np.maximum(n, 1)
        share = observed / some[:, None]
        statistic = some * ((share - expected) ** 2 / expected).sum(axis=1)
        p_value = chdtrc(len(expected) - 1, statistic)
        mad = np.abs(share - expected).mean(axis=1)
        columns = (n.tolist(), statistic.tolist(), p_value.tolist(), mad.tolist())
        for of_stream, values in zip(scores, zip(*columns, strict=True), strict=True):
            if values[0] > 0:
                of_stream[view] = _score(*values)
    return scores


def _score(n: float, statistic: float, p_value: float, mad: float) -> dict[str, float]:
    return {
        "count": int(n),
        "chi_square": round(float(statistic), 3),
        "p_value": float(p_value),
        "mad": round(float(mad), 6),
    }
