"""The best taps of one length in the minimax sense, and what no taps of it can better."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pipeline_filters.design.compliance import POINTS_PER_TAP, amplitude_at
from pipeline_filters.design.extremes import local_maxima
from pipeline_filters.design.targets import Corridor

_LEAST_POINTS = 2048
_MOST_ITERATIONS = 100


@dataclass(frozen=True)
class Aim:
    """A corridor for the amplitude, which unlike the magnitude has a sign.

    Attributes:
        low_hz, high_hz: its edges.
        centre, half_width: the amplitude must lie within ``half_width`` of ``centre``.
    """

    low_hz: float
    high_hz: float
    centre: float
    half_width: float


def aim_of(corridor: Corridor) -> Aim:
    """The widest corridor of amplitude that keeps the magnitude within its bounds.

    A tolerance in dB is uneven about its gain; the middle of its linear bounds is aimed at.
    Where there is no lower bound the amplitude may take either sign.
    """
    low, high = corridor.low, corridor.high
    if low <= 0:
        return Aim(corridor.low_hz, corridor.high_hz, 0.0, high)
    return Aim(corridor.low_hz, corridor.high_hz, (low + high) / 2, (high - low) / 2)


def scaled_taps(length: int, aims: Sequence[Aim], rate_hz: float) -> NDArray[np.float64] | None:
    """One or two equal taps that meet all aims, or None where none do.

    Their amplitude c cos(w/2)^(length - 1) falls with frequency, so that each aim bounds c
    from both sides by its two edges. At half the rate a cosine counts as 0.
    """
    low, high = -np.inf, np.inf
    for aim in aims:
        at_low, at_high = (
            float(np.cos(np.pi * hz / rate_hz)) ** (length - 1) for hz in (aim.low_hz, aim.high_hz)
        )
        least, most = aim.centre - aim.half_width, aim.centre + aim.half_width
        high = min(high, most / at_low)
        if least <= 0:
            low = max(low, least / at_low)
        elif at_high > 1e-9:
            low = max(low, least / at_high)
        else:
            return None
    if not low <= high:
        return None
    return np.full(length, (low + high) / 2 / length)


def exchange_taps(
    length: int, aims: Sequence[Aim], rate_hz: float, density: int
) -> NDArray[np.float64] | None:
    """Taps with the smallest largest error over half width, on a grid of the aims' bands.

    By the exchange of Parks and McClellan (1972), in scipy.signal.remez.

    Args:
        length: 3 taps or more.
        aims: in rising order, with room between them.
        rate_hz: samples a second.
        density: grid points for each extreme of the error.

    Returns:
        shape (length,), symmetric; None where the exchange does not converge.
    """
    from scipy.signal import remez  # long to load, so only where it is asked for

    weights = np.array([1 / aim.half_width for aim in aims])
    try:
        taps = remez(
            length,
            [hz for aim in aims for hz in (aim.low_hz, aim.high_hz)],
            [aim.centre for aim in aims],
            weight=weights / weights.min(),
            fs=rate_hz,
            maxiter=_MOST_ITERATIONS,
            grid_density=density,
        )
    except ValueError:  # it says that it failed to converge, or ran out of extremes
        return None
    if not np.isfinite(taps).all():
        return None
    return np.asarray((taps + taps[::-1]) / 2)


def errors_of(
    taps: NDArray[np.float64], aims: Sequence[Aim], rate_hz: float
) -> tuple[float, float]:
    """The largest error over half width of symmetric taps, and the least possible for any.

    Where the error of taps alternates in sign at one more points than there are free taps,
    no other taps of that length can be better at all of them than the smallest of these
    errors (de la Vallee Poussin's theorem; Cheney, Introduction to Approximation Theory,
    chapter 3).

    Returns:
        The largest error, and that proven bound; the bound is 0 where the error does not
        alternate often enough to prove any. Both in half widths.
    """
    points = 1 << (max(_LEAST_POINTS, POINTS_PER_TAP * taps.size) - 1).bit_length()
    omega: NDArray[np.float64] = np.linspace(0.0, np.pi, points + 1)
    turn = np.exp(0.5j * (taps.size - 1) * omega)
    amplitude = (np.fft.rfft(taps, 2 * points) * turn).real
    parts: list[NDArray[np.float64]] = []
    for aim in aims:
        low, high = (2 * np.pi * hz / rate_hz for hz in (aim.low_hz, aim.high_hz))
        first, stop = np.searchsorted(omega, [low, high], side="right")
        ends = amplitude_at(taps, np.array([low, high]))
        at, kept = np.unique(np.concatenate([[low], omega[first:stop], [high]]), return_index=True)
        values = np.concatenate([ends[:1], amplitude[first:stop], ends[1:]])[kept]
        # Parabolas tell where the extremes lie; what is proven rests on true values there.
        places = np.concatenate([local_maxima(at, values)[0], local_maxima(at, -values)[0]])
        parts.append((amplitude_at(taps, np.sort(places)) - aim.centre) / aim.half_width)
    extremes = np.concatenate(parts)
    free = (taps.size + 1) // 2
    return float(np.abs(extremes).max()), _alternating(extremes, free + 1)


def _alternating(extremes: NDArray[np.float64], count: int) -> float:
    """The smallest magnitude of ``count`` extremes of alternating sign, chosen well."""
    kept: list[float] = []
    for value in extremes:
        if kept and value * kept[-1] > 0:
            if abs(value) > abs(kept[-1]):
                kept[-1] = float(value)
        elif value != 0:
            kept.append(float(value))
    while len(kept) > count:
        # From an end one may go; from within, only a pair keeps the signs alternating.
        smallest = min(range(len(kept)), key=lambda i: abs(kept[i]))
        if smallest in (0, len(kept) - 1):
            del kept[smallest]
        elif len(kept) - count >= 2:
            other = min((smallest - 1, smallest + 1), key=lambda i: abs(kept[i]))
            del kept[min(smallest, other) : max(smallest, other) + 1]
        else:
            del kept[0 if abs(kept[0]) < abs(kept[-1]) else -1]
    return min(abs(value) for value in kept) if len(kept) == count else 0.0
