"""A log tail as columns."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from service.digits.significand import FloatArray, IntArray, circle
from service.digits.views import cells_hit
from service.streams import record
from service.streams.record import Records
from service.streams.runs import place_in_run
from service.streams.state import States


@dataclass
class Rows:
    """The rows of a log tail as columns, sorted by slot and, within it, in log order."""

    slot: IntArray
    number: IntArray  # row number of the record
    policy: IntArray
    amount: IntArray
    at: IntArray
    arrived: IntArray
    historic: npt.NDArray[np.bool_]
    cell: IntArray  # (3, n) by view, -1 where not seen
    wave: FloatArray  # (6, n) circle sums, see STATE
    raw: Records

    def take(self, rows: IntArray) -> Rows:
        return Rows(
            self.slot[rows],
            self.number[rows],
            self.policy[rows],
            self.amount[rows],
            self.at[rows],
            self.arrived[rows],
            self.historic[rows],
            self.cell[:, rows],
            self.wave[:, rows],
            self.raw[rows],
        )


def columns(state: States, records: Records, slot: IntArray) -> Rows:
    """Read the records into columns; row numbers go on from what was folded before."""
    amount = records["amount"].astype(np.int64)
    turn = 2 * np.pi * circle(np.maximum(amount, 1))
    log = np.log10(np.maximum(amount, 1).astype(np.float64))
    return Rows(
        slot=slot,
        number=state["records"][slot] + place_in_run(slot),
        policy=records["policy"].astype(np.int64),
        amount=amount,
        at=record.at(records),
        arrived=record.arrived(records),
        historic=(records["flags"] & record.HISTORIC) > 0,
        cell=np.stack(cells_hit(amount)),
        wave=np.stack(
            [np.cos(turn), np.sin(turn), np.cos(2 * turn), np.sin(2 * turn), log, log * log]
        ),
        raw=records,
    )
