"""Whole-array references for the kernels, written from the definitions, with loops."""

from __future__ import annotations

import numpy as np
from scipy.signal import sosfilt


def bridged(row: np.ndarray, bridge: int) -> np.ndarray:
    """A row with runs of up to ``bridge`` NaN between present samples on the straight line."""
    out = row.astype(float).copy()
    n = 0
    while n < row.size:
        if not np.isnan(row[n]):
            n += 1
            continue
        stop = n
        while stop < row.size and np.isnan(row[stop]):
            stop += 1
        run = stop - n
        if run <= bridge and n > 0 and stop < row.size:
            left, right = row[n - 1], row[stop]
            for i in range(run):
                out[n + i] = left + (right - left) * ((i + 1) / (run + 1))
        n = stop
    return out


def extended(row: np.ndarray, rule: str, before: int, after: int) -> np.ndarray:
    """A row with NaN marks, extended by the ends rule; blank gives NaN."""
    n = row.size

    def at(i: int) -> float:
        if 0 <= i < n:
            return row[i]
        if rule == "zero":
            return 0.0
        if rule == "blank":
            return np.nan
        if rule == "hold" or n == 1:
            return row[0] if i < 0 else row[-1]
        if rule == "even":
            j = abs(i) % (2 * (n - 1))
            return row[j if j < n else 2 * (n - 1) - j]
        # odd: reflect about whichever end was passed until inside
        value, sign = 0.0, 1.0
        while not 0 <= i < n:
            if i < 0:
                value, sign, i = value + sign * 2 * row[0], -sign, -i
            else:
                value, sign, i = value + sign * 2 * row[-1], -sign, 2 * (n - 1) - i
        return value + sign * row[i]

    return np.array([at(i) for i in range(-before, n + after)])


def filtered(row, taps, lead, rule, bridge, support_before=None, support_after=None):
    """Taps over one row by numpy.convolve, missing spread over the support; NaN marks."""
    p = taps.size
    before, after = p - 1 - lead, lead
    support_before = before if support_before is None else support_before
    support_after = after if support_after is None else support_after
    whole = extended(bridged(row, bridge), rule, before, after)
    gone = np.isnan(whole)
    values = np.convolve(np.where(gone, 0, whole), taps, mode="full")[p - 1 : p - 1 + row.size]
    out = values.copy()
    for n in range(row.size):
        middle = n + before
        if gone[middle - support_before : middle + support_after + 1].any():
            out[n] = np.nan
    return out


def recursed(row, sections, rest, settle, rule, bridge):
    """Sections over one row, started from rest anew after every missing run; NaN marks."""
    row = bridged(row, bridge)
    out = np.full(row.size, np.nan)
    present = ~np.isnan(row)
    edges = np.flatnonzero(np.diff(present.astype(int), prepend=0, append=0)).reshape(-1, 2)
    for begin, end in edges:
        part = row[begin:end]
        known = extended(part, "zero" if rule == "blank" else rule, rest, 0)
        y = sosfilt(sections, known)[rest:]
        if begin > 0 or rule == "blank":
            y[:settle] = np.nan
        out[begin:end] = y
    return out
