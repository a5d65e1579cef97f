"""What the numbers mean, written down once more, sample by sample, from the definitions alone."""

from __future__ import annotations

import numpy as np

Array = np.ndarray


def filtered(x: Array, taps: Array, lead: int, ends: str, bridge: int) -> Array:
    """One stretch of one channel through taps: y[n] = sum of taps[k] x[n + lead - k].

    NaN is a missing sample, in what is given and in what comes out.
    """
    x = bridged(x, bridge)
    missing = np.isnan(x)
    values, marks = extended(np.where(missing, 0, x), missing, ends, taps.size - 1 - lead, lead)
    results = np.convolve(np.where(marks, 0, values), taps, "valid")
    spread = np.convolve(marks.astype(float), np.ones(taps.size), "valid") > 0.5
    return np.where(spread, np.nan, results)


def bridged(x: Array, longest: int) -> Array:
    """Runs of up to ``longest`` missing samples between two present ones, on the line."""
    x = x.copy()
    begin = 0
    while begin < x.size:
        end = begin
        while end < x.size and np.isnan(x[end]):
            end += 1
        if begin < end < x.size and begin and end - begin <= longest:
            steps = np.arange(1, end - begin + 1) / (end - begin + 1)
            x[begin:end] = x[begin - 1] + (x[end] - x[begin - 1]) * steps
        begin = max(end, begin + 1)
    return x


def extended(x: Array, missing: Array, ends: str, before: int, after: int) -> tuple[Array, Array]:
    """A stretch and what stands beyond its ends, with marks of what is missing."""

    def at(index: int) -> tuple[float, bool]:
        last = x.size - 1
        if 0 <= index <= last:
            return x[index], missing[index]
        if ends in ("zero", "blank"):
            return 0.0, ends == "blank"
        near = 0 if index < 0 else last
        if ends == "hold" or last == 0:
            return x[near], missing[near]
        value, mark = at(2 * near - index)
        if ends == "even":
            return value, mark
        return 2 * x[near] - value, mark or missing[near]

    pairs = [at(index) for index in range(-before, x.size + after)]
    return np.array([value for value, _ in pairs]), np.array([mark for _, mark in pairs])
