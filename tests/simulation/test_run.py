"""Simulated streams go through the service's fold, and their figures are true."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from service.detection import bank
from service.detection.cells import VIEW_OF_CELL
from service.detection.policy import Policy
from service.simulation.fraud import Pair49, RoundEndings
from service.simulation.honest import Law, LogNormal, NearNine, PricePoints, Recurring
from service.simulation.run import Flock, simulate
from service.simulation.source import uniforms
from tests.streams.plain import PlainStream

LAW = Policy(reference="law")
LOUD = replace(LAW, transactions_per_false_alarm=1000.0)


def made_up(seed, number, change, rows, share):
    """Return one stream's rows, written down without the simulation's loop."""
    own = [np.random.SeedSequence(seed, spawn_key=(number, purpose)) for purpose in (0, 1)]
    amounts = Law().source(own[:1]).rows(rows)[0][0]
    u = uniforms([np.random.Generator(np.random.SFC64(own[1]))], rows - change, 2)[0]
    bad = u[:, 0] < share
    amounts[change:][bad] = 4900 + np.floor(100 * u[bad, 1]).astype(int)
    return amounts.tolist()


def test_delays_and_early_alarms_are_those_of_a_plain_loop_on_the_same_rows() -> None:
    # exact for every stream; the loop of tests/streams/plain.py shares nothing with the fold
    change, rows, share, seed = 300, 700, 0.1, 7
    policy = replace(LAW, transactions_per_false_alarm=60.0)
    flock = Flock(policy, Law(), seed, range(6))
    seen = flock.honest(change)
    delays = flock.changed(Pair49(), share, rows - change)
    bounds = bank.LAW * (1 + np.array(policy.tolerances())[VIEW_OF_CELL])
    for number in range(6):
        plain = PlainStream(bounds, bank.LAW[9:99], policy.transactions_per_false_alarm)
        for amount in made_up(seed, number, change, rows, share):
            plain.add(amount)
        crossed = [row for row, _ in plain.crossings]
        assert seen.alarms[number] == sum(row <= change for row in crossed)
        assert delays[number] == min(row - change for row in crossed if row > change)
    assert 0 < seen.alarms.sum() < 6 * 16  # so few that neither side pauses


def test_the_delay_at_ten_percent_is_the_designs() -> None:
    # 91 rows in design.md section 3, at A = 10^6 after 2000 clean rows. Mean of 60 streams, error
    # about 5: within 4 standard errors, and 6 for what the bank's weights have changed since
    result = simulate(LAW, Law(), Pair49(), share=0.1, streams=60, change=500, rows=2000, seed=11)
    assert result.delay is not None
    assert result.delay.found == 1
    assert abs(result.delay.mean - 91) < 4 * result.delay.standard_error + 6
    assert 0.3 < {n: p for n, p, _ in result.delay.found_within}[100] < 0.9


def test_the_law_keeps_the_promise_at_a_thousand() -> None:
    # 320 000 rows: at one alarm in 1000 rows 320 were due, standard error 18; about 80 come
    result = simulate(LOUD, Law(), streams=64, rows=5000, seed=5)
    run = result.honest.false_alarms
    assert run.rows == 320_000
    assert run.alarms > 20  # the detectors were at work
    assert run.low > 1000
    assert run.alarms < 320 - 5 * np.sqrt(320)
    assert result.honest.bounds_hold == 1
    assert result.honest.false_alarms_where_bounds_hold == run
    assert run.reaching == pytest.approx(1, abs=0.05)
    assert run.refuted == 0


def test_a_pattern_outside_the_bounds_is_told_to_be_so() -> None:
    result = simulate(LOUD, NearNine(moved=0.3), streams=10, rows=3000)
    assert result.honest.bounds_hold == 0
    assert result.honest.false_alarms.mean is not None
    assert result.honest.false_alarms.mean < 1000
    assert result.honest.guarantee["holds"] < 0.5


@pytest.mark.parametrize("reference", ["law", "auto"])
def test_the_same_seed_gives_the_same_result_whatever_the_group(reference) -> None:
    policy = replace(
        LOUD, reference=reference, baseline_size=400, baseline_days=3.0, baseline_confidence=0.9
    )

    def run(seed, group):
        return simulate(
            policy,
            LogNormal(sigma=0.45),
            RoundEndings(),
            share=0.3,
            change=900,
            streams=7,
            rows=1400,
            seed=seed,
            group=group,
        )

    one = run(3, 7)
    assert run(3, 1) == run(3, 3) == one
    assert run(4, 7) != one


def test_more_streams_or_rows_only_add() -> None:
    few, many = (Flock(LOUD, Law(), 1, range(n)) for n in (3, 5))
    np.testing.assert_array_equal(few.honest(1500).alarms, many.honest(1500).alarms[:3])
    short, long = Flock(LAW, Law(), 1, range(4)), Flock(LAW, Law(), 1, range(4))
    a, b = short.changed(Pair49(), 0.1, 120), long.changed(Pair49(), 0.1, 600)
    np.testing.assert_array_equal(a, np.where(b <= 120, b, np.inf))


def test_a_fork_goes_its_own_way() -> None:
    flock = Flock(LAW, Law(), 2, range(5))
    flock.honest(200)
    fork = flock.fork()
    first = fork.changed(Pair49(), 0.4, 300)
    np.testing.assert_array_equal(flock.fork().changed(Pair49(), 0.4, 300), first)
    assert flock.rows == 200
    assert len(flock.numbers) == 5


def test_rows_of_a_baseline_do_not_count() -> None:
    policy = replace(LOUD, reference="own", baseline_size=300, baseline_days=4.0)
    honest = simulate(policy, PricePoints(), streams=3, rows=1000).honest
    # 4 days of event time pass with row 401, the first of the fifth day
    assert honest.false_alarms.rows == 3 * (1000 - 401)
    assert honest.references["own"] == {"lead_digit": 1, "lead_pair": 1, "tail_pair": 1}
    assert honest.bounds_hold is None
    young = simulate(policy, PricePoints(), streams=3, rows=200).honest
    assert young.false_alarms.rows == young.false_alarms.alarms == 0
    assert young.references["learning"]["lead_pair"] == 1
    assert young.guarantee["void"] == 1


def test_a_change_that_a_baseline_never_saw_is_no_promise() -> None:
    policy = replace(LOUD, reference="own", baseline_size=300, baseline_days=4.0)
    honest = simulate(policy, Recurring(), streams=4, rows=2500).honest
    assert honest.false_alarms.alarms > 0
    assert honest.guarantee["holds"] == 0


@pytest.mark.parametrize("fraud", [None, Pair49()])
def test_progress_sums_to_all_rows(fraud) -> None:
    done = []
    simulate(LAW, Law(), fraud, streams=5, rows=900, change=300, group=2, progress=done.append)
    assert sum(done) == 5 * 900
    assert min(done) > 0


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"streams": 0}, "streams must be 1 to"),
        ({"rows": 0}, "rows must be 1 to"),
        ({"seed": -1}, "seed must be 0 to"),
        ({"group": 0}, "group must be 1 to"),
        ({"fraud": Pair49(), "share": 0}, "share must be 1e-06 to 1"),
        ({"fraud": Pair49(), "change": 5000}, "change must be 0 to 4999"),
        ({"policy": replace(LAW, flows=("payout",))}, "flows of the policy must include sale"),
        ({"honest": Law(per_day=1), "rows": 60_000, "streams": 1}, "rows must end before 2106"),
    ],
)
def test_bad_arguments_are_named(arguments, message) -> None:
    with pytest.raises(ValueError, match=message):
        simulate(**{"policy": LAW, "honest": Law(), **arguments})
