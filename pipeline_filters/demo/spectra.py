"""Levels over frequency of samples in stretches, some of them missing."""

from __future__ import annotations

from itertools import pairwise
from typing import Any

import numpy as np
from numpy.typing import NDArray

SEGMENT = 4000
_HALF_WIDTH_HZ = 1.0

Array = NDArray[Any]


def density(values: Array, rate_hz: float, breaks: list[int]) -> tuple[Array, Array]:
    """The mean power density of each channel, over segments that no break or NaN lies in.

    Args:
        values: shape (time, channel).
        breaks: indices at which a stretch after the first begins.

    Returns:
        frequencies in Hz, and the density in squared units per Hz, shape (channel, frequency);
        one-sided, under a Hann window, of segments that overlap by half.
    """
    window = np.hanning(SEGMENT + 1)[:-1]
    scale = 2 / (rate_hz * np.sum(window**2))
    total = np.zeros((values.shape[1], SEGMENT // 2 + 1))
    count = np.zeros((values.shape[1], 1))
    edges = [0, *breaks, values.shape[0]]
    for low, high in pairwise(edges):
        for start in range(low, high - SEGMENT + 1, SEGMENT // 2):
            part = values[start : start + SEGMENT].astype(np.float64)
            whole = np.isfinite(part).all(axis=0)
            power = np.abs(np.fft.rfft(part[:, whole] * window[:, None], axis=0)) ** 2
            total[whole] += scale * power.T
            count[whole] += 1
    return np.fft.rfftfreq(SEGMENT, 1 / rate_hz), total / np.maximum(count, 1)


def level_db(hertz: Array, densities: Array, line_hz: float) -> float:
    """The power within 1 Hz of a line, in dB re 1 squared unit; the median over channels."""
    near = np.abs(hertz - line_hz) <= _HALF_WIDTH_HZ
    power = densities[:, near].sum(axis=1) * (hertz[1] - hertz[0])
    return float(10 * np.log10(np.median(power)))
