"""A merchant's own amounts: read exactly, and resampled in whole days or blocks."""

from __future__ import annotations

from datetime import UTC, datetime

import numpy as np
import pytest

from service.simulation.resample import BLOCK_ROWS, Amounts, Resampled, UnreadableFile, read_amounts
from service.simulation.source import DAY_MS, START_MS
from tests.simulation.test_honest import rows_of, seeds


def test_minor_units_times_and_headers_are_read() -> None:
    read = read_amounts(
        [
            "\ufeffId,At,Amount\n",
            "1,2026-11-30T12:00:00Z,1999\n",
            "2,2026-11-30T13:00:00.250+01:00, 5 \n",
            "\n",
            "3,2026-12-01,0\n",
            "4,2026-12-01,-5\n",
        ]
    )
    noon = int(datetime(2026, 11, 30, 12, tzinfo=UTC).timestamp() * 1000)
    assert read.amount.tolist() == [1999, 5]
    assert read.at is not None
    assert read.at.tolist() == [noon, noon + 250]
    assert read.skipped == 2


def test_a_decimal_point_anywhere_means_major_units() -> None:
    assert read_amounts(["19.99", "20", ".5"]).amount.tolist() == [1999, 2000, 50]
    assert read_amounts(["19.995", "20"], decimals=3).amount.tolist() == [19_995, 20_000]
    # as a binary float, 1.15 * 100 is 114.99999999999999
    assert read_amounts(["1.15"]).amount.tolist() == [115]
    assert read_amounts(["1999", "20"]).at is None


@pytest.mark.parametrize(
    ("lines", "message"),
    [
        ([], "the file is empty"),
        (["price,at", "1,2"], "line 1: expected a column headed amount"),
        (["amount", "12", "EUR 5"], "line 3: 'EUR 5' is not an amount"),
        (["amount", "1e5"], "line 2: '1e5' is not an amount"),
        (["1.234"], "line 1: 1.234 has more than 2 decimals"),
        (["amount,at", "5"], "line 2: has only 1 columns"),
        (["amount,at", "5,yesterday"], "line 2: 'yesterday' is not an ISO 8601 time"),
        (["9" * 16], r"line 1: 9{16} is above 10\*\*15"),
        (["0", "0"], "no row has an amount above zero"),
    ],
)
def test_faults_are_told_with_their_line(lines, message) -> None:
    with pytest.raises(UnreadableFile, match=message):
        read_amounts(lines)


def test_whole_days_are_resampled_with_their_times_of_day() -> None:
    # three days of different length; an amount tells its day and place
    day = np.array([5, 5, 5, 7, 9, 9])
    hour = np.array([8, 12, 20, 9, 10, 11])
    amounts = Amounts(day * 100 + np.array([0, 1, 2, 0, 0, 1]), day * DAY_MS + hour * 3_600_000)
    own = Resampled(amounts=amounts)
    rows, at = rows_of(own, 500, streams=2)
    wanted = {500: [500, 501, 502], 700: [700], 900: [900, 901]}
    for mine, times in zip(rows, at, strict=True):
        number = (times - START_MS) // DAY_MS
        assert np.all(np.diff(number) <= 1)
        seen = [mine[number == d].tolist() for d in range(int(number[-1]))]
        assert all(d == wanted[d[0]] for d in seen)
        counts = [sum(d[0] == first for d in seen) / len(seen) for first in wanted]
        # each day a third of the time: four standard errors of about 250 draws
        assert counts == pytest.approx([1 / 3] * 3, abs=4 * np.sqrt(2 / 9 / len(seen)))
        hours = dict(zip((day * 100 + [0, 1, 2, 0, 0, 1]).tolist(), hour.tolist(), strict=True))
        assert [hours[a] for a in mine.tolist()] == (times % DAY_MS // 3_600_000).tolist()
    assert not np.array_equal(rows[0], rows[1])
    assert own.rows_a_day() == 2
    np.testing.assert_allclose(own.cells()[0][:9][[4, 6, 8]], [1 / 2, 1 / 6, 1 / 3])


def test_without_times_runs_of_rows_stay_together() -> None:
    own = Resampled(amounts=Amounts(np.arange(1, 4 * BLOCK_ROWS + 20)), per_day=10)
    rows, at = rows_of(own, 10 * BLOCK_ROWS, streams=1)
    blocks = rows.reshape(-1, BLOCK_ROWS)
    assert np.all(np.diff(blocks, axis=1) == 1)
    assert np.all(blocks[:, 0] % BLOCK_ROWS == 1)
    assert rows.max() <= 4 * BLOCK_ROWS  # what fills no block is left out
    np.testing.assert_array_equal((at[0] - START_MS) // DAY_MS, np.arange(len(at[0])) // 10)


def test_cuts_and_other_streams_change_nothing() -> None:
    rng = np.random.default_rng(2)
    own = Resampled(
        amounts=Amounts(rng.integers(1, 9999, 900), np.sort(rng.integers(0, 30 * DAY_MS, 900)))
    )
    whole, _ = rows_of(own, 400, streams=3)
    source = own.source(seeds(3))
    first, _ = source.rows(150)
    np.testing.assert_array_equal(first, whole[:, :150])
    source.keep(np.array([1]))
    np.testing.assert_array_equal(source.rows(250)[0][0], whole[1, 150:])


def test_too_few_amounts_are_refused() -> None:
    with pytest.raises(ValueError, match="two blocks of 50 rows"):
        Resampled(amounts=Amounts(np.arange(1, 2 * BLOCK_ROWS)))
    with pytest.raises(ValueError, match="two blocks of one day"):
        Resampled(amounts=Amounts(np.arange(1, 200), np.arange(1, 200)))
