"""Batches of invented merchants, made before a measurement begins.

Every second merchant's amounts follow the logarithmic law; the others price within a range of
their own, so that a service must learn what is ordinary for them. A row is about 100 bytes and has
an id that no other row of the run has.

Run as a program, it describes the batches and, if asked to, keeps one of them.
"""

from __future__ import annotations

import argparse
import time
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import numpy.typing as npt

IntArray = npt.NDArray[np.int64]

DAY = 86_400  # seconds
_AT_ONCE = 200_000  # rows made at a time, which bounds memory
_PLACES = [
    "harbour",
    "abbey",
    "bridge",
    "canal",
    "castle",
    "cedar",
    "chapel",
    "corner",
    "dock",
    "elm",
    "ferry",
    "garden",
    "hill",
]
_TRADES = [
    "books",
    "tea",
    "bikes",
    "shoes",
    "lamps",
    "bread",
    "tools",
    "music",
    "toys",
    "wool",
    "paper",
    "pots",
    "plants",
    "maps",
]


class Traffic:
    """Rows of one run, numbered through.

    Parameters
    ----------
    rng : Generator
    merchants : int
        How many there are; the first is the busiest of `zipf`.
    label : str
        Begins every merchant's name, so that two traffics touch different streams.
    """

    def __init__(self, rng: np.random.Generator, merchants: int, label: str = "") -> None:
        self.rng = rng
        self.names = np.array(
            [
                f"{label}{_PLACES[i % len(_PLACES)]}-{_TRADES[i % len(_TRADES)]}-{i:03d}"
                for i in range(merchants)
            ]
        )
        self.label = label
        self._serial = 0

    def zipf(self, rows: int) -> IntArray:
        """Draw whose the rows are: a merchant of rank r has weight 1/r."""
        shares = np.cumsum(1 / np.arange(1, len(self.names) + 1))
        return np.searchsorted(shares, self.rng.uniform(0, shares[-1], rows))

    def dealt(self, each: int) -> IntArray:
        """Give every merchant equally many rows, in random order."""
        return self.rng.permutation(np.repeat(np.arange(len(self.names)), each))

    def hot(self, batches: int, rows: int, share: float, *, one: bool) -> IntArray:
        """Let one merchant have a fixed share of every batch; the rest is anyone's.

        With ``one`` it is the same merchant in every batch, else another in each: batches are
        equally composed, but only the former all meet in one stream.
        """
        many = len(self.names)
        who = self.rng.integers(1 if one else 0, many, (batches, rows))
        most = max(1, round(share * rows))
        who[:, :most] = 0 if one else (np.arange(batches) % many)[:, None]
        return self.rng.permuted(who, axis=1).ravel()

    def batches(
        self, who: IntArray, rows: int, *, days: float = 0.0, until: float = 0.0
    ) -> Iterator[bytes]:
        """Yield JSON bodies of ``rows`` rows each (the last may have fewer).

        Parameters
        ----------
        who : array of int
            The merchant of each row.
        rows : int
            A batch.
        days, until : float
            Event times ascend over so many days, and end so many days ago.
        """
        now = int(time.time())
        most = max(rows, _AT_ONCE // rows * rows)
        for first in range(0, len(who), most):
            part = who[first : first + most]
            place = np.arange(first, first + len(part)) / max(1, len(who) - 1)
            at = now - (until + days * (1 - place)) * DAY
            yield from self._bodies(part, at.astype(np.int64), rows)

    def _bodies(self, who: IntArray, at: IntArray, rows: int) -> Iterator[bytes]:
        seconds, second = np.unique(at, return_inverse=True)
        times = np.datetime_as_string(seconds.astype("datetime64[s]"))[second]
        first, self._serial = self._serial, self._serial + len(who)
        lines = [
            f'{{"id":"{self.label}-{i:09d}","merchant":"{name}","amount":{amount},'
            f'"currency":"EUR","at":"{time}Z"}}'
            for i, (name, amount, time) in enumerate(
                zip(
                    self.names[who].tolist(),
                    self._amounts(who).tolist(),
                    times.tolist(),
                    strict=True,
                ),
                first,
            )
        ]
        for start in range(0, len(lines), rows):
            yield b'{"transactions":[%b]}' % ",".join(lines[start : start + rows]).encode()

    def _amounts(self, who: IntArray) -> IntArray:
        lawful = self.rng.uniform(2, 6, len(who))
        ranged = self.rng.normal(3.2 + who % 16 / 10, 0.2)
        return (10 ** np.where(who % 2 == 0, lawful, ranged)).astype(np.int64)


def bodies(
    rng: np.random.Generator, count: int, rows: int, merchants: int, now: int
) -> Iterator[bytes]:
    """Yield distinct JSON bodies of a busy poster; ``now`` is in milliseconds since 1970 UTC."""
    traffic = Traffic(rng, merchants)
    past = (time.time() - now / 1000) / DAY
    return traffic.batches(traffic.zipf(count * rows), rows, until=past)


def main() -> None:
    """Describe batches of every size."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--sizes", type=int, nargs="*", default=[1, 10, 100, 1000, 5000])
    parser.add_argument("--merchants", type=int, nargs="*", default=[50, 500, 5000])
    parser.add_argument("--count", type=int, default=20, help="batches of each kind")
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--keep", type=Path, help="write the last batch here")
    given = parser.parse_args()
    print("| merchants | rows a batch | bytes a row | merchants in a batch |\n|--:|--:|--:|--:|")
    for merchants in given.merchants:
        traffic = Traffic(np.random.default_rng(given.seed), merchants)
        for rows in given.sizes:
            who = traffic.zipf(given.count * rows)
            made = list(traffic.batches(who, rows))
            size = sum(map(len, made)) / who.size
            touched = np.mean([np.unique(part).size for part in who.reshape(-1, rows)])
            print(f"| {merchants} | {rows} | {size:.0f} | {touched:.0f} |")
    if given.keep:
        given.keep.write_bytes(made[-1])


if __name__ == "__main__":
    main()
