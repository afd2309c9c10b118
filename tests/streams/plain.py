"""A second, plain implementation of one stream: a loop over rows, straight from the formulas.

It shares with the service only the weights, the bounds handed to it, and nothing of the paths.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field

import numpy as np

from service.detection import bank
from service.detection.cells import VIEW_OF_CELL
from service.digits.laws import leading_law


def cells_of(amount: int) -> list[int]:
    """Read the digits from the decimal string."""
    text = str(amount)
    cells = [int(text[0]) - 1, -1, -1]
    if len(text) >= 2:
        cells[1] = 9 + int(text[:2]) - 10
    if amount >= 1000:
        cells[2] = 99 + int(text[-2:])
    return cells


def coarse_of(amount: int) -> list[int]:
    """Ranges of the lead pair: halves of a digit, four ranges, three ranges."""
    text = str(amount)
    if len(text) < 2:
        return []
    pair = int(text[:2])
    return [
        199 + pair // 5 - 2,
        217 + (pair >= 20) + (pair >= 50) + (pair >= 80),
        221 + (pair >= 30) + (pair >= 60),
    ]


@dataclass
class PlainStream:
    """Detectors of one stream against fixed bounds (224,), evaluated row by row."""

    bounds: np.ndarray
    pair_shares: np.ndarray
    threshold: float = math.inf
    value: np.ndarray = field(default_factory=lambda: np.zeros((224, 3)))
    cusum: np.ndarray = field(default_factory=lambda: np.zeros(224))
    onset: np.ndarray = field(default_factory=lambda: np.zeros(224, int))
    shape: np.ndarray = field(default_factory=lambda: np.zeros(bank.SHAPES))
    count: np.ndarray = field(default_factory=lambda: np.zeros(224, int))
    rows: int = 0
    crossings: list[tuple[int, float]] = field(default_factory=list)

    def __post_init__(self) -> None:
        # each shape's ratio q/p* on all 90 cells, with c found by bisection
        self.ratio = np.ones((bank.SHAPES, 90))
        self.shape_on = np.zeros(bank.SHAPES, bool)
        u = self.bounds[9:99]
        edges = np.log10(np.arange(10, 101) / 10)
        for j in range(bank.SHAPES):
            if j < 2:
                e = (0.15, 0.40)[j]
                q = (1 - e) * self.pair_shares + e / 90
            else:
                rho, phase = (0.25, 0.5)[(j - 2) // 6], ((j - 2) % 6) / 6
                grid = np.linspace(edges[:-1], edges[1:], 2001, axis=1)
                wave = np.trapezoid(np.cos(2 * np.pi * (grid - phase)), grid, axis=1) / leading_law(
                    2
                )
                q = self.pair_shares * (1 + rho * wave)
                q = q / q.sum()
            if np.all(q <= u):
                continue
            low, high = 0.0, 1e6
            for _ in range(200):
                c = (low + high) / 2
                if np.minimum(u, c * q).sum() < 1:
                    low = c
                else:
                    high = c
            self.ratio[j] = q / np.minimum(u, c * q)
            self.shape_on[j] = True

    def total(self) -> float:
        cells = bank.CELL_WEIGHTS[:, None] * bank.EPSILON_SHARES * self.value
        return float(cells.sum() + (bank.SHAPE_WEIGHTS * self.shape_on * self.shape).sum())

    def add(self, amount: int) -> None:
        self.rows += 1
        for view, cell in enumerate(cells_of(amount)):
            if cell < 0:
                continue
            hit = [cell, *(coarse_of(amount) if view == 1 else [])]
            self.count[hit] += 1
            mine = view == VIEW_OF_CELL
            ratio = np.ones((224, 3)) * (1 - bank.EPSILONS)
            ratio[hit] += bank.EPSILONS / self.bounds[hit, None]
            self.value[mine] = ((1 + self.value) * ratio)[mine]
            gain = np.full(224, math.log(0.88))
            gain[hit] = np.log(0.88 + 0.12 / self.bounds[hit])
            rested = mine & (self.cusum <= 0)
            self.onset[rested] = self.rows
            self.cusum[mine] = np.maximum(self.cusum + gain, 0)[mine]
            if view == 1:
                self.shape = (1 + self.shape) * self.ratio[:, cell - 9]
        total = self.total()
        often = len(self.crossings) >= 16 and self.rows - self.crossings[-1][0] < 128
        if total >= self.threshold and not often:
            self.crossings.append((self.rows, total))
            self.restart()

    def restart(self) -> None:
        self.value[:] = 0
        self.cusum[:] = 0
        self.onset[:] = 0
        self.shape[:] = 0
