"""Exact running values of every detector, evaluated after every row, whatever the cuts.

A detector's step is a map: affine ``x -> a x + b`` for Shiryaev-Roberts values, max-plus
``x -> max(x + s, m)`` for CUSUMs. Maps compose associatively, so all running values of many
segments come from one prefix scan in log2(longest segment) steps. The first map of a segment has
its starting value folded in and forgets what came before (a = 0, or s = -inf), so segments need no
other mark.
"""

from __future__ import annotations

import numpy as np

from service.digits.significand import FloatArray

CEILING = 1e100
"""Values are held at this ceiling, far above any alarm threshold, so that nothing overflows."""


def affine_path(a: FloatArray, b: FloatArray, longest: int) -> FloatArray:
    """Return the value after every step of ``x -> a x + b``.

    Parameters
    ----------
    a, b : float64 arrays (..., n)
        Non-negative; a is 0 at the first step of each segment, with ``a x0`` already added to b.
        Both are used as scratch space.
    longest : int
        Length of the longest segment.

    Returns
    -------
    float64 array (..., n)
        Exact to rounding below ``CEILING``; at least ``CEILING`` where the true value is larger.

    Raises
    ------
    ValueError
        If a and b have not one shape.
    """
    if a.shape != b.shape:
        raise ValueError(f"a and b must have one shape, got {a.shape} and {b.shape}")
    np.minimum(b, CEILING, out=b)
    scratch = np.empty_like(b)
    distance = 1
    while distance < longest:
        product = scratch[..., distance:]
        np.multiply(a[..., distance:], b[..., :-distance], out=product)
        b[..., distance:] += product
        np.minimum(b, CEILING, out=b)
        if 2 * distance < longest:
            np.multiply(a[..., distance:], a[..., :-distance], out=product)
            np.minimum(product, CEILING, out=a[..., distance:])
        distance *= 2
    return b


def cusum_path(s: FloatArray, m: FloatArray, longest: int) -> FloatArray:
    """Return the value after every step of ``x -> max(x + s, m)``.

    Parameters
    ----------
    s, m : float64 arrays (..., n)
        s is -inf at the first step of each segment, with ``max(x0 + s, m)`` already in m.
        Both are used as scratch space.
    longest : int
        Length of the longest segment.

    Raises
    ------
    ValueError
        If s and m have not one shape.
    """
    if s.shape != m.shape:
        raise ValueError(f"s and m must have one shape, got {s.shape} and {m.shape}")
    distance = 1
    while distance < longest:
        np.maximum(m[..., distance:], m[..., :-distance] + s[..., distance:], out=m[..., distance:])
        s[..., distance:] += s[..., :-distance].copy()
        distance *= 2
    return m
