"""Whether responses do what bands ask: the true magnitude, extremes refined."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from math import log10

import numpy as np
from numpy.typing import NDArray
from scipy.fft import next_fast_len, rfft  # the magnitude of long taps on a fine grid
from scipy.signal import sosfreqz

from pipeline_filters.design.contract import Response, SectionsResponse, TapsResponse
from pipeline_filters.design.impulse import pole_radius
from pipeline_filters.spec.model import Band

# Points a tap on the grid; between them, local extremes are refined.
POINTS_PER_TAP = 16
_LEAST_POINTS = 4096
_MOST_POINTS = 1 << 21


@dataclass(frozen=True)
class BandFinding:
    """What was found in one band.

    Attributes:
        worst_hz: where the response comes nearest to the limit, or passes it most.
        worst_magnitude: the magnitude there (squared where the chain is zero-phase).
        deviation, limit: in the band's own terms, dB or linear.
    """

    band: Band
    worst_hz: float
    worst_magnitude: float
    deviation: float
    limit: float
    complies: bool


def magnitude(
    responses: Sequence[Response], freq_hz: NDArray[np.float64], rate_hz: float
) -> NDArray[np.float64]:
    """The product of the responses' magnitudes at frequencies in Hz; same shape."""
    freq_hz = np.asarray(freq_hz, np.float64)
    total = np.ones(freq_hz.shape)
    for response in responses:
        if isinstance(response, TapsResponse):
            total *= taps_magnitude(response.taps, freq_hz, rate_hz)
        else:
            _, values = sosfreqz(response.sections, worN=2 * np.pi * freq_hz / rate_hz)
            total *= np.abs(values)
    return total


def taps_magnitude(
    taps: NDArray[np.float64], freq_hz: NDArray[np.float64], rate_hz: float
) -> NDArray[np.float64]:
    """|sum of taps[k] exp(-j w k)| at frequencies in Hz, in slices that bound the memory."""
    omega = 2 * np.pi * np.asarray(freq_hz, np.float64) / rate_hz
    out = np.empty(omega.shape)
    # About the centre, where the phases of long filters lose least to rounding.
    k = np.arange(taps.size) - (taps.size - 1) / 2
    step = max(1, (1 << 22) // taps.size)
    for low in range(0, omega.size, step):
        out[low : low + step] = np.abs(np.exp(-1j * np.outer(omega[low : low + step], k)) @ taps)
    return out


def check_bands(
    responses: Sequence[Response], bands: Sequence[Band], rate_hz: float, squared: bool
) -> tuple[BandFinding, ...]:
    """Checks the cascade of responses against bands.

    Looks at no fewer than 16 points a tap of the whole cascade, at all band edges, and at
    local extremes refined between grid points.

    Args:
        squared: judge |H|^2, as for zero-phase timing.
    """
    if not bands:
        return ()

    def judged(freq_hz: NDArray[np.float64]) -> NDArray[np.float64]:
        values = magnitude(responses, freq_hz, rate_hz)
        return values**2 if squared else values

    grid_hz, values = _on_grid(responses, rate_hz)
    values = values**2 if squared else values
    return tuple(_check(band, judged, grid_hz, values, rate_hz) for band in bands)


def _on_grid(
    responses: Sequence[Response], rate_hz: float
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    taps = sum(r.taps.size for r in responses if isinstance(r, TapsResponse))
    points = max(_LEAST_POINTS, POINTS_PER_TAP * taps)
    for response in responses:
        if isinstance(response, SectionsResponse):
            # A resonance as narrow as its pole is near the circle must not fall through.
            radius, _ = pole_radius(response.sections)
            points = max(points, int(min(_MOST_POINTS, 32 / max(1 - radius, 1e-9))))
    points = next_fast_len(points, real=True)
    grid_hz: NDArray[np.float64] = np.linspace(0.0, rate_hz / 2, points + 1)
    values = np.ones(points + 1)
    for response in responses:
        if isinstance(response, TapsResponse):
            values *= np.abs(rfft(response.taps, 2 * points))
        else:
            values *= magnitude([response], grid_hz, rate_hz)
    return grid_hz, values


def _check(
    band: Band,
    judged: Callable[[NDArray[np.float64]], NDArray[np.float64]],
    grid_hz: NDArray[np.float64],
    values: NDArray[np.float64],
    rate_hz: float,
) -> BandFinding:
    high_hz = rate_hz / 2 if band.high_hz is None else band.high_hz
    inside = (grid_hz > band.low_hz) & (grid_hz < high_hz)
    edges = np.array([band.low_hz, high_hz])
    at = np.concatenate([edges, grid_hz[inside]])
    deviations = _deviation(band, np.concatenate([judged(edges), values[inside]]))
    # Extremes lie between grid points: the worst few places are looked at more closely.
    step = float(grid_hz[1])
    worst = at[np.argsort(deviations)[-8:]]
    near = np.clip(worst[:, None] + np.linspace(-step, step, 65), band.low_hz, high_hz).ravel()
    fine = judged(near)
    fine_deviations = _deviation(band, fine)
    index = int(fine_deviations.argmax())
    deviation = float(fine_deviations[index])
    return BandFinding(
        band,
        float(near[index]),
        float(fine[index]),
        deviation,
        band.tolerance,
        deviation <= band.tolerance + 1e-9 * max(1.0, abs(band.tolerance)),
    )


def _deviation(band: Band, values: NDArray[np.float64]) -> NDArray[np.float64]:
    if not band.decibels:
        return np.abs(values - band.gain)
    decibels = 20 * np.log10(np.maximum(values, 1e-300))
    return decibels if band.gain == 0 else np.abs(decibels - 20 * log10(band.gain))


def linear_bounds(band: Band, squared: bool) -> tuple[float, float]:
    """The lowest and highest magnitude that a band allows a single pass.

    With ``squared`` the square must comply, so the bounds are roots.
    """
    if band.gain == 0:
        high = 10 ** (band.tolerance / 20) if band.decibels else band.tolerance
        low = 0.0
    elif band.decibels:
        factor = 10 ** (band.tolerance / 20)
        low, high = band.gain / factor, band.gain * factor
    else:
        low, high = max(0.0, band.gain - band.tolerance), band.gain + band.tolerance
    return (low**0.5, high**0.5) if squared else (low, high)
