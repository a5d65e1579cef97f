"""Equiripple taps: the shortest linear-phase taps that meet the bands."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import replace
from fractions import Fraction
from itertools import pairwise
from math import ceil, log10, pi

import numpy as np
from numpy.typing import NDArray

from pipeline_filters.design.contract import TapsResponse
from pipeline_filters.design.length_search import MOST_EQUIRIPPLE_TAPS, LengthSearch
from pipeline_filters.design.minimax import Aim, aim_of
from pipeline_filters.design.targets import Corridor, corridors
from pipeline_filters.errors import Problem, ToleranceError
from pipeline_filters.spec.model import Filter, Timing

# Over the largest gain: the exchange does not settle reliably on finer ripple.
FINEST_RIPPLE = 1e-8
# How far over the largest magnitude that a band allows it may rise between bands.
_RISE = 1.1
# Rooms between bands are narrowed to these multiples of the narrowest.
_ROOMS = (1.0, 1.5, 2.0, 3.0)


def estimated_length(aims: Sequence[Aim], rate_hz: float) -> int:
    """An estimate of the taps that an equiripple design needs.

    (-10 lg(d1 d2) - 13)/(2.324 dw) + 1 for the strictest neighbours (Kaiser's estimate for
    the Parks-McClellan design; Oppenheim and Schafer, Discrete-Time Signal Processing,
    section 7.7), with ripples over the step between them.
    """
    lengths = []
    for lower, upper in pairwise(aims):
        step = abs(lower.centre - upper.centre) or 1.0
        ripples = lower.half_width * upper.half_width / step**2
        width = 2 * pi * (upper.low_hz - lower.high_hz) / rate_hz
        lengths.append((-10 * log10(ripples) - 13) / (2.324 * width) + 1)
    return max(3, ceil(min(max(lengths), 1e9)))


def design_equiripple(filter: Filter, rate_hz: Fraction, timing: Timing) -> TapsResponse:
    """The shortest symmetric taps whose response keeps within the bands.

    Errors are weighted by the tolerances. Among lengths of one parity the best error never
    grows with the length, so each parity is searched by doubling and halving about an
    estimate. A length is passed over only once it is proven too short, or the finest grid
    has failed. Even lengths are out where the gain at half the rate is not 0.

    Nothing is asked between bands, and where the rooms between them differ the shortest taps
    may rise there a thousandfold, if the exchange settles at all. So wide rooms are first
    narrowed to the narrowest, by stretching the neighbour of the lower gain, and opened step
    by step as long as that saves taps and the response holds: a few taps more than without.

    Raises:
        SpecError: fewer than two bands, or bands that no filter can be made from.
        ToleranceError: not met with up to 4,000 taps, or a ripple finer than 1e-8 of the
            largest gain, on which the exchange does not settle; with how near it came.
    """
    wanted = corridors(filter, rate_hz, timing)
    rate, squared = float(rate_hz), timing == "zero-phase"
    _refuse_too_fine(filter, wanted)
    aims = [aim_of(corridor) for corridor in wanted]
    allowed = _RISE * max(corridor.high for corridor in wanted)
    estimate = estimated_length(aims, rate)

    def search(narrowed: Sequence[Aim]) -> LengthSearch:
        # Three times the estimate is not for want of length: the exchange does not settle.
        longest = MOST_EQUIRIPPLE_TAPS if narrowed is aims else 3 * estimate + 50
        return LengthSearch(filter, narrowed, rate, squared, longest)

    best = _held(aims, search, estimate, allowed, rate)
    if best is not None:
        return TapsResponse(best[0], True, (f"equiripple: {best[1]} (estimate {estimate})",))
    sought = search(aims)
    taps = sought.shortest(estimate)
    note = f"equiripple: {_account(taps, sought)} (estimate {estimate})"
    rise, at_hz = _highest(taps, rate)
    if rise > allowed:
        note += (
            f"; between bands they rise to {rise:.4g} in one pass, at {at_hz:.6g} Hz: a band "
            "there would hold them"
        )
    return TapsResponse(taps, True, (note,))


def _account(taps: NDArray[np.float64], sought: LengthSearch) -> str:
    """What a search can say of the shortest taps that it found."""
    doubtful = sought.doubtful_below(taps.size)
    if not doubtful:
        return f"{taps.size} taps, proven the shortest for the bands"
    return f"{taps.size} taps; neither met nor excluded: {', '.join(map(str, doubtful))}"


def _held(
    aims: list[Aim],
    search: Callable[[Sequence[Aim]], LengthSearch],
    estimate: int,
    allowed: float,
    rate_hz: float,
) -> tuple[NDArray[np.float64], str] | None:
    """The shortest taps whose magnitude stays below ``allowed`` in uneven rooms, and a note.

    None where the rooms are even, or where no narrowing of them leads to such taps.
    """
    best: NDArray[np.float64] | None = None
    note = ""
    for room_hz, narrowed in _with_rooms(aims):
        sought = search(narrowed)
        if best is None:
            if room_hz is None:
                return None
            try:
                taps = sought.shortest(estimate)
            except ToleranceError:
                continue
        else:
            fewer = sought.shorter(best.size)
            if fewer is None:
                if room_hz is None:
                    note = _account(best, sought)
                continue
            taps = fewer
        rise, at_hz = _highest(taps, rate_hz)
        if rise > allowed:
            if best is None:
                return None
            note += (
                f"; {taps.size} taps meet the bands too, but rise to {rise:.4g} in one pass "
                f"between them, at {at_hz:.6g} Hz"
            )
            break
        best = taps
        note = (
            _account(taps, sought)
            if room_hz is None
            else f"{taps.size} taps, no room between bands counted wider than {room_hz:.6g} Hz"
        )
    return None if best is None else (best, note)


def _refuse_too_fine(filter: Filter, wanted: Sequence[Corridor]) -> None:
    finest = FINEST_RIPPLE * max(corridor.high for corridor in wanted)
    problems = [
        Problem(
            str(corridor.band.place or filter.place("bands")),
            f"filter {filter.name} (equiripple): a ripple of {aim_of(corridor).half_width:.4g} "
            f"about gain {corridor.nominal:.6g} in one pass",
            f"no finer than {finest:.4g}",
            "widen the tolerance, or use kaiser",
        )
        for corridor in wanted
        if aim_of(corridor).half_width < finest
    ]
    if problems:
        raise ToleranceError(*problems)


def _with_rooms(aims: list[Aim]) -> Iterator[tuple[float | None, list[Aim]]]:
    """Aims with ever more room between them, in Hz; at last as they are, with None.

    Nothing where all rooms are alike.
    """
    rooms = [upper.low_hz - lower.high_hz for lower, upper in pairwise(aims)]
    for multiple in _ROOMS:
        widest = multiple * min(rooms)
        if widest >= max(rooms):
            break
        narrowed = list(aims)
        for i, room in enumerate(rooms):
            lower, upper = narrowed[i], narrowed[i + 1]
            if room > widest and lower.centre < upper.centre:
                narrowed[i] = replace(lower, high_hz=upper.low_hz - widest)
            elif room > widest:
                narrowed[i + 1] = replace(upper, low_hz=lower.high_hz + widest)
        yield widest, narrowed
    if max(rooms) > min(rooms):
        yield None, aims


def _highest(taps: NDArray[np.float64], rate_hz: float) -> tuple[float, float]:
    """The largest magnitude on a grid, and the frequency in Hz where it lies."""
    points = 16 * max(taps.size, 128)
    levels = np.abs(np.fft.rfft(taps, 2 * points))
    peak = int(levels.argmax())
    return float(levels[peak]), peak * rate_hz / 2 / points
