"""Run lengths and delays are summarised honestly."""

from __future__ import annotations

import json
import math

import numpy as np
import pytest
from scipy import stats

from service.simulation.outcome import delay, finite, run_length


def test_the_interval_is_garwoods_where_alarms_are_poisson() -> None:
    alarms = np.array([1, 0, 2, 0, 1, 1, 0, 0, 1, 1])
    run = run_length(np.full(10, 5000), alarms, 1000)
    low, high = stats.chi2.ppf(0.025, 14) / 2, stats.chi2.ppf(0.975, 16) / 2
    assert (run.rows, run.alarms, run.mean) == (50_000, 7, 50_000 / 7)
    assert run.low == pytest.approx(50_000 / high)
    assert run.high == pytest.approx(50_000 / low)
    assert run.standard_error == pytest.approx(50_000 / 7 / math.sqrt(7))


def test_without_an_alarm_there_is_only_a_lower_bound() -> None:
    run = run_length(np.full(4, 1000), np.zeros(4, int), 1000)
    assert run.mean is run.high is run.standard_error is None
    assert run.low == pytest.approx(4000 / -math.log(0.025))  # P(no alarm) is 2.5 % there
    assert run.reaching == 1
    nothing = run_length(np.zeros(4, int), np.zeros(4, int), 1000)
    assert (nothing.low, nothing.reaching, nothing.streams) == (0, None, 0)


def test_streams_that_differ_widen_the_error() -> None:
    even = run_length(np.full(10, 5000), np.full(10, 4), 1000)
    uneven = run_length(np.full(10, 5000), np.array([40] + [0] * 9), 1000)
    assert even.mean == uneven.mean
    assert uneven.standard_error == pytest.approx(even.standard_error * math.sqrt(40))
    assert uneven.low < even.low


def test_streams_below_the_promise_are_told_from_unlucky_ones() -> None:
    rows = np.array([10_000] * 5 + [500])
    alarms = np.array([0, 10, 11, 15, 30, 3])
    run = run_length(rows, alarms, 1000)
    assert run.streams == 5  # one had too few rows to say
    assert run.reaching == pytest.approx(2 / 5)
    # by SciPy: P(X >= 15) = 0.083, P(X >= 30) = 3e-7 where 10 are expected
    assert [stats.poisson.sf(k - 1, 10) < 0.01 for k in (11, 15, 30)] == [False, False, True]
    assert run.refuted == pytest.approx(1 / 5)


@pytest.mark.parametrize("seed", range(3))
def test_the_interval_covers_a_known_run_length(seed) -> None:
    # alarms of unlike merchants: their rates vary by a gamma distribution; coverage near 95 %
    rng = np.random.default_rng(seed)
    covered = 0
    for _ in range(400):
        rate = rng.gamma(1.0, 1.0, 60) / 2000
        run = run_length(np.full(60, 4000), rng.poisson(rate * 4000), 1000)
        covered += run.low <= 2000 <= (run.high or math.inf)
    assert 0.90 <= covered / 400 <= 0.98  # 0.95 and five standard errors, less its known slack


def test_delays_not_found_are_not_hidden() -> None:
    found = delay(np.array([10.0, 20.0, 30.0, np.inf]), 100)
    assert found.found == 0.75
    assert found.mean == 40  # a lower bound
    assert found.standard_error == pytest.approx(np.std([10, 20, 30, 100], ddof=1) / 2)
    assert (found.median, found.ninety) == (20, None)
    assert [w[:2] for w in found.found_within] == [(10, 0.25), (30, 0.75), (100, 0.75)]
    assert found.found_within[1][2] == pytest.approx(math.sqrt(0.75 * 0.25 / 4))


def test_json_has_no_infinities() -> None:
    document = finite({"a": [math.inf, 1.5, "x", (math.nan, None)], "b": {"c": -math.inf}})
    assert document == {"a": [None, 1.5, "x", [None, None]], "b": {"c": None}}
    json.dumps(document, allow_nan=False)
