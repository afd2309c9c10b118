"""Runs of equal keys in a sorted array: the rows of a stream, the hits of a cell."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from service.digits.significand import IntArray


def opens_run(key: IntArray) -> npt.NDArray[np.bool_]:
    """Return which elements of a sorted array begin a run of equal ones."""
    return np.concatenate([np.ones(min(len(key), 1), bool), key[1:] != key[:-1]])
