"""Whole-number arithmetic with fractions, on arrays, exact at any size."""

from __future__ import annotations

from math import gcd

import numpy as np
from numpy.typing import NDArray

Counts = NDArray[np.int64]


def divided_half_even(top: int, bottom: int) -> int:
    """top / bottom rounded half to even; ``bottom`` is positive."""
    whole, rest = divmod(top, bottom)
    return whole + (2 * rest > bottom or (2 * rest == bottom and whole % 2 == 1))


def scaled_half_even(counts: Counts, top: int, bottom: int, base: Counts) -> Counts:
    """base + counts * top / bottom, rounded once, half to even.

    Args:
        counts, base: int64, one shape.
        top, bottom: the factor as a fraction, ``bottom`` positive.

    Returns:
        int64; exact wherever the result itself fits.
    """
    shared = gcd(top, bottom)
    top, bottom = top // shared, bottom // shared
    if bottom == 1 and -(2**63) <= top < 2**63:
        # Wraps at most where the result does, which then does not fit.
        return counts * np.int64(top) + base
    if 2 * abs(top) * bottom >= 2**63:
        pairs = zip(counts.tolist(), base.tolist(), strict=True)
        exact = [divided_half_even(n * top + start * bottom, bottom) for n, start in pairs]
        return np.array(exact, np.int64)
    whole, rest = np.divmod(counts, np.int64(bottom))
    part, left = np.divmod(rest * np.int64(top), np.int64(bottom))
    out = whole * np.int64(top) + part + base
    twice = 2 * left
    out += (twice > bottom) | ((twice == bottom) & ((out & 1) == 1))
    return out
