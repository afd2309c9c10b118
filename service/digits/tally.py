"""Checks shared by everything that reads a tally: counts in cells and their reference."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from service.digits.significand import FloatArray


def checked(counts: npt.ArrayLike, p: npt.ArrayLike) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return counts, their total and the reference as float64, or say what is wrong with them.

    Parameters
    ----------
    counts : array (..., K)
        Amounts counted in each of K >= 2 cells; whole numbers of at least 0, below 2**53.
    p : array (K,) or (..., K)
        Reference shares of the cells, each 0 to 1 with sum 1.

    Returns
    -------
    counts : float64 array (..., K)
    n : float64 array (...)
        Total count of each tally.
    p : float64 array, of the shape given

    Raises
    ------
    ValueError
        If an argument is outside its range; the message names it.
    """
    c = checked_counts(counts)
    law = checked_law(p)
    if c.shape[-1] != law.shape[-1]:
        raise ValueError(
            f"counts and p must have the same number of cells, got {c.shape[-1]} and"
            f" {law.shape[-1]}"
        )
    return c, c.sum(axis=-1), law


def checked_counts(counts: npt.ArrayLike) -> FloatArray:
    """Return counts as float64 (..., K); ValueError unless whole numbers 0 to 2**53, K >= 2."""
    c = np.asarray(counts, dtype=np.float64)
    if c.ndim < 1 or c.shape[-1] < 2:
        raise ValueError(f"counts must have at least 2 cells on the last axis, got {c.shape}")
    if not np.all((c >= 0) & (c <= 2.0**53) & (c == np.floor(c))):
        raise ValueError("counts must be whole numbers from 0 to 2**53")
    return c


def checked_law(p: npt.ArrayLike) -> FloatArray:
    """Return reference shares as float64; ValueError unless each is 0 to 1 with sum 1."""
    law = np.asarray(p, dtype=np.float64)
    if law.ndim < 1 or law.shape[-1] < 2:
        raise ValueError(f"p must have at least 2 cells on the last axis, got {law.shape}")
    # Written so that NaN fails too. 1e-9 is far above the rounding of a sum of 100 shares.
    if not (np.all((law >= 0) & (law <= 1)) and np.all(np.abs(law.sum(axis=-1) - 1) <= 1e-9)):
        raise ValueError("p must be shares from 0 to 1 whose sum is 1")
    return law


def checked_total(n: npt.ArrayLike) -> FloatArray:
    """Return totals as float64 (...); ValueError unless whole numbers from 0 to 2**53."""
    total = np.asarray(n, dtype=np.float64)
    if not np.all((total >= 0) & (total <= 2.0**53) & (total == np.floor(total))):
        raise ValueError("n must be whole numbers from 0 to 2**53")
    return total


def nan_if_empty(n: FloatArray) -> FloatArray:
    """Return n with 0 replaced by NaN, so that a division by it is silent and says unknown."""
    return np.where(n > 0, n, np.nan)
