"""Responses put together: taps convolved in a fixed order, and two-sided responses."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from pipeline_filters.design.contract import Response, TapsResponse
from pipeline_filters.design.impulse import impulse_response

# Where the rest of the sum of |h| is below this share of the whole, a response is at rest.
AT_REST = 1e-12


def convolve_taps(one: NDArray[np.float64], other: NDArray[np.float64]) -> NDArray[np.float64]:
    """The taps of two responses in series, shape (P1 + P2 - 1,).

    Summed in ascending order of the shorter one's taps, so that the same two sets of taps
    always give the same bits.
    """
    short, long = (one, other) if one.size <= other.size else (other, one)
    merged = np.zeros(one.size + other.size - 1)
    for k, tap in enumerate(short):
        merged[k : k + long.size] += tap * long
    return merged


def two_sided(response: Response) -> tuple[NDArray[np.float64], int]:
    """A response run forward and backward in effect: its taps, and half their support.

    Returns:
        The autocorrelation of the impulse response, shape (2P - 1,), centred; and the
        samples on each side of a result that missing samples and blank ends follow. For
        taps that is P - 1. A recursion's impulse response is cut where it is at rest, and
        its support ends where the rest of the sum of |taps| falls below ``settle``.
    """
    if isinstance(response, TapsResponse):
        taps = response.taps
        return convolve_taps(taps, taps[::-1]), taps.size - 1
    impulse = impulse_response(response.sections, AT_REST)
    taps = convolve_taps(impulse, impulse[::-1])
    centre = impulse.size - 1
    rest = 2 * np.cumsum(np.abs(taps[: centre + 1]))  # rest[j]: both tails outside centre - j
    whole = float(np.abs(taps).sum())
    outside = int(np.searchsorted(rest[:centre], response.settle * whole, side="right"))
    return taps, centre - outside
