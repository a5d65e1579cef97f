"""Whether responses do what bands ask: the true magnitude, local extremes refined."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from math import log10

import numpy as np
from numpy.typing import NDArray

from pipeline_filters.design.contract import Response, TapsResponse
from pipeline_filters.design.extremes import local_maxima
from pipeline_filters.design.impulse import poles_of
from pipeline_filters.design.targets import all_band_edges
from pipeline_filters.spec.model import Band

POINTS_PER_TAP = 16
_LEAST_POINTS = 1 << 14
# Looked at in every band, however narrow, and the local extremes refined in each.
_POINTS_IN_BAND = 33
_EXTREMES_REFINED = (8, 64)  # the fewer the more taps
# How far below the highest a local extreme may lie, by its first parabola, to be refined.
_WORTH = 0.02
# A deviation within this share of its limit meets it: rounding must not decide.
_ROUNDING = 1e-9
# Phases computed at a time: 32 MiB.
_SLICE = 1 << 22


@dataclass(frozen=True)
class BandFinding:
    """What was found in one band.

    Attributes:
        band: the band.
        worst_hz: where the response deviates most.
        worst_magnitude: the magnitude there, linear (squared where the square is judged).
        deviation, limit: in the band's own terms: dB, or linear. For gain 0 in dB the
            deviation is the level itself.
        complies: whether the deviation is within the limit.
    """

    band: Band
    worst_hz: float
    worst_magnitude: float
    deviation: float
    limit: float
    complies: bool


def amplitude_at(taps: NDArray[np.float64], omega: NDArray[np.float64]) -> NDArray[np.float64]:
    """The signed amplitude of symmetric taps, the sum of taps[k] cos(w (k - centre)).

    Args:
        taps: shape (P,), symmetric.
        omega: shape (n,), in radians a sample.

    Returns:
        shape (n,).
    """
    # Phases counted from the centre: those of long filters lose least to rounding so.
    from_centre = (taps.size - 1) / 2 - np.arange((taps.size + 1) // 2)
    half = np.where(from_centre > 0, 2, 1) * taps[: from_centre.size]
    out = np.empty(omega.size)
    step = max(1, _SLICE // half.size)
    for low in range(0, omega.size, step):
        out[low : low + step] = np.cos(np.outer(omega[low : low + step], from_centre)) @ half
    return out


def taps_magnitude(
    taps: NDArray[np.float64], freq_hz: NDArray[np.float64], rate_hz: float
) -> NDArray[np.float64]:
    """The magnitude of sum_k taps[k] exp(-j w k).

    Args:
        taps: shape (P,).
        freq_hz: frequencies in Hz, any shape.
        rate_hz: samples a second.

    Returns:
        Linear magnitudes in the shape of ``freq_hz``.
    """
    omega = 2 * np.pi / rate_hz * np.asarray(freq_hz, np.float64)
    flat, out = omega.ravel(), np.empty(omega.size)
    if np.array_equal(taps, taps[::-1]):
        return np.abs(amplitude_at(taps, flat)).reshape(omega.shape)
    k = np.arange(taps.size) - (taps.size - 1) / 2
    step = max(1, _SLICE // taps.size)
    for low in range(0, flat.size, step):
        angles = np.outer(flat[low : low + step], k)
        out[low : low + step] = np.hypot(np.cos(angles) @ taps, np.sin(angles) @ taps)
    return out.reshape(omega.shape)


def sections_magnitude(
    sections: NDArray[np.float64], freq_hz: NDArray[np.float64], rate_hz: float
) -> NDArray[np.float64]:
    """The magnitude of second-order sections in series, linear, in the shape of ``freq_hz``.

    Args:
        sections: shape (S, 6).
        freq_hz: frequencies in Hz, any shape.
        rate_hz: samples a second.
    """
    back = np.exp(-2j * np.pi / rate_hz * np.asarray(freq_hz, np.float64))  # z^-1
    out = np.ones(back.shape)
    for b0, b1, b2, a0, a1, a2 in sections:
        out *= np.abs((b0 + back * (b1 + back * b2)) / (a0 + back * (a1 + back * a2)))
    return out


def magnitude(
    responses: Sequence[Response], freq_hz: NDArray[np.float64], rate_hz: float
) -> NDArray[np.float64]:
    """The magnitude of responses in series, linear, in the shape of ``freq_hz``.

    Args:
        responses: in series; none is a wire.
        freq_hz: frequencies in Hz, any shape.
        rate_hz: samples a second.
    """
    total = np.ones(np.shape(freq_hz))
    for response in responses:
        if isinstance(response, TapsResponse):
            total *= taps_magnitude(response.taps, freq_hz, rate_hz)
        else:
            total *= sections_magnitude(response.sections, freq_hz, rate_hz)
    return total


def check_bands(
    responses: Sequence[Response], bands: Sequence[Band], rate_hz: float, squared: bool
) -> tuple[BandFinding, ...]:
    """Holds responses in series against bands.

    Looks at 16 points or more for each tap of the series, more closely about the poles of
    sections, at all band edges, and between the points at the highest local extremes of the
    deviation. A deviation within a billionth of its limit counts as within it.

    Args:
        responses: in series; none is a wire.
        bands: what is asked.
        rate_hz: samples a second.
        squared: judge the squared magnitude, as zero-phase timing has it.

    Raises:
        SpecError: band edges outside 0 to half the rate.
    """
    if not bands:
        return ()
    edges = all_band_edges(bands, rate_hz)

    def judged(freq_hz: NDArray[np.float64]) -> NDArray[np.float64]:
        values = magnitude(responses, freq_hz, rate_hz)
        return values**2 if squared else values

    grid_hz, values = _on_grid(responses, rate_hz)
    grid = grid_hz, values**2 if squared else values
    size = max([1, *(r.taps.size for r in responses if isinstance(r, TapsResponse))])
    refined = int(np.clip(_SLICE // (4 * size), *_EXTREMES_REFINED))
    return tuple(
        _check(band, pair, judged, grid, refined) for band, pair in zip(bands, edges, strict=True)
    )


def deviation_of(band: Band, values: NDArray[np.float64]) -> NDArray[np.float64]:
    """How far magnitudes lie from a band's gain, in the band's terms; same shape."""
    if not band.decibels:
        return np.abs(values - band.gain)
    decibels = 20 * np.log10(np.maximum(values, 1e-300))
    return decibels if band.gain == 0 else np.abs(decibels - 20 * log10(band.gain))


def _smooth(band: Band, values: NDArray[np.float64]) -> NDArray[np.float64]:
    """What rises with the deviation and is shaped like a parabola about its maxima.

    Near zeros of a stop band decibels are not.
    """
    return values if band.gain == 0 else deviation_of(band, values)


def _on_grid(
    responses: Sequence[Response], rate_hz: float
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Rising frequencies from 0 to half the rate, and the magnitudes there."""
    all_taps = [response.taps for response in responses if isinstance(response, TapsResponse)]
    least = max(_LEAST_POINTS, POINTS_PER_TAP * sum(taps.size for taps in all_taps))
    points = 1 << (least - 1).bit_length()
    grid_hz: NDArray[np.float64] = np.linspace(0.0, rate_hz / 2, points + 1)
    values: NDArray[np.float64] = np.ones(points + 1)
    for taps in all_taps:
        values *= np.abs(np.fft.rfft(taps, 2 * points))
    all_sections = [r.sections for r in responses if not isinstance(r, TapsResponse)]
    if not all_sections:
        return grid_hz, values
    close_hz = np.concatenate([_about_poles(sections, rate_hz) for sections in all_sections])
    close: NDArray[np.float64] = np.ones(close_hz.size)
    for taps in all_taps:
        close *= taps_magnitude(taps, close_hz, rate_hz)
    grid_hz, at = np.unique(np.concatenate([grid_hz, close_hz]), return_index=True)
    values = np.concatenate([values, close])[at]
    for sections in all_sections:
        values = values * sections_magnitude(sections, grid_hz, rate_hz)
    return grid_hz, values


def _about_poles(sections: NDArray[np.float64], rate_hz: float) -> NDArray[np.float64]:
    """Frequencies about the poles, the closer together the nearer to the pole's own.

    A resonance is about as wide as its pole is near to the circle; steps that grow by a
    quarter follow it at every distance.
    """
    poles = poles_of(sections)
    out = []
    for pole in poles[(poles.imag >= 0) & (np.abs(poles) > 0)]:
        nearest = max(1 - abs(pole), 1e-13) / 8
        away = nearest * 1.25 ** np.arange(int(np.log(np.pi / nearest) / np.log(1.25)) + 1)
        out.append(np.angle(pole) + np.concatenate([-away, [0.0], away]))
    omega: NDArray[np.float64] = np.concatenate(out) if out else np.empty(0)
    return omega[(omega >= 0) & (omega <= np.pi)] * (rate_hz / 2 / np.pi)


def _check(
    band: Band,
    edges_hz: tuple[float, float],
    judged: Callable[[NDArray[np.float64]], NDArray[np.float64]],
    grid: tuple[NDArray[np.float64], NDArray[np.float64]],
    refined: int,
) -> BandFinding:
    grid_hz, values = grid
    low_hz, high_hz = edges_hz
    first = int(np.searchsorted(grid_hz, low_hz, side="right"))
    stop = int(np.searchsorted(grid_hz, high_hz, side="left"))
    if stop - first >= _POINTS_IN_BAND:
        ends = judged(np.array(edges_hz))
        at = np.concatenate([[low_hz], grid_hz[first:stop], [high_hz]])
        found = np.concatenate([ends[:1], values[first:stop], ends[1:]])
    else:
        at = np.unique(np.linspace(low_hz, high_hz, _POINTS_IN_BAND))
        found = judged(at)
    places, heights = local_maxima(at, _smooth(band, found))
    worth = np.argsort(heights)[-refined:]
    places = places[worth[heights[worth] >= heights.max() * (1 - _WORTH)]]
    # A second parabola, through true values a sixteenth of the spacing about each place.
    index = np.clip(np.searchsorted(at, places), 1, max(1, at.size - 1))
    apart = (at[index] - at[index - 1]) / 16 if at.size > 1 else np.zeros(places.size)
    around = np.clip(places[:, None] + apart[:, None] * np.array([-1, 0, 1]), low_hz, high_hz)
    values = judged(around)
    heights = _smooth(band, values)
    vertices = np.array([_vertex(x, y) for x, y in zip(around, heights, strict=True)])
    at = np.concatenate([at, around.ravel(), vertices])
    found = np.concatenate([found, values.ravel(), judged(vertices)])
    deviations = deviation_of(band, found)
    index_worst = int(deviations.argmax())
    worst_hz, value, worst = at[index_worst], found[index_worst], deviations[index_worst]
    return BandFinding(
        band,
        float(worst_hz),
        float(value),
        float(worst),
        band.tolerance,
        bool(worst <= band.tolerance + _ROUNDING * abs(band.tolerance)),
    )


def _vertex(x: NDArray[np.float64], y: NDArray[np.float64]) -> float:
    """Where the highest local maximum of a few points lies; at a band's edge some coincide."""
    kept = np.append(True, np.diff(x) > 0)
    places, heights = local_maxima(x[kept], y[kept])
    return float(places[heights.argmax()])
