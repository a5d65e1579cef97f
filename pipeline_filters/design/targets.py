"""Bands made ready for design: ordered, with room between them, as corridors of |H|."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction
from itertools import pairwise

from pipeline_filters.errors import Problem, SpecError
from pipeline_filters.spec.model import Band, Filter, Timing

# An edge written in decimals may miss half the rate by the rounding of a float.
_EDGE_ROUNDING = 1e-12


@dataclass(frozen=True)
class Corridor:
    """What one pass through a filter must keep to between two frequencies.

    Attributes:
        band: the band it comes from.
        low_hz, high_hz: its edges.
        low, high: the least and the largest magnitude allowed, linear; ``low`` is 0 where
            the band sets no lower bound.
        nominal: the gain aimed at.
    """

    band: Band
    low_hz: float
    high_hz: float
    low: float
    high: float
    nominal: float

    @property
    def ripple(self) -> float:
        """The largest deviation from the nominal gain that is allowed on both sides."""
        if self.nominal == 0:
            return self.high
        return min(self.high - self.nominal, self.nominal - self.low)


def band_edges(band: Band, rate_hz: float) -> tuple[float, float]:
    """The two edges of a band in Hz, an open upper one at half the rate.

    Raises:
        SpecError: edges that fall, below 0, or past half the rate.
    """
    half_hz = rate_hz / 2
    high_hz = half_hz if band.high_hz is None else band.high_hz
    if half_hz < high_hz <= half_hz * (1 + _EDGE_ROUNDING):
        high_hz = half_hz
    if not 0 <= band.low_hz <= high_hz <= half_hz:
        raise SpecError(
            Problem(
                str(band.place or "bands"),
                f"a band from {band.low_hz:.10g} Hz to {high_hz:.10g} Hz at a sample rate of "
                f"{rate_hz:.10g} Hz",
                f"rising edges between 0 and half the rate, {half_hz:.10g} Hz",
                "move the edges, or use data of a higher rate",
            )
        )
    return band.low_hz, high_hz


def all_band_edges(bands: Sequence[Band], rate_hz: float) -> list[tuple[float, float]]:
    """`band_edges` of every band, with every problem at once.

    Raises:
        SpecError: as `band_edges`.
    """
    edges: list[tuple[float, float]] = []
    problems: list[Problem] = []
    for band in bands:
        try:
            edges.append(band_edges(band, rate_hz))
        except SpecError as error:
            problems += error.problems
    if problems:
        raise SpecError(*problems)
    return edges


def magnitude_bounds(band: Band, squared: bool) -> tuple[float, float]:
    """The least and the largest magnitude that a band allows one pass, linear.

    A gain g > 0 with t dB allows g / 10^(t/20) to g * 10^(t/20); a linear tolerance g - t to
    g + t; a gain of 0 up to 10^(t/20) or t.

    Args:
        band: the band.
        squared: the square of the magnitude is judged, so the bounds are roots.
    """
    if band.gain == 0:
        low, high = 0.0, 10 ** (band.tolerance / 20) if band.decibels else band.tolerance
    elif band.decibels:
        factor = 10 ** (band.tolerance / 20)
        low, high = band.gain / factor, band.gain * factor
    else:
        low, high = max(0.0, band.gain - band.tolerance), band.gain + band.tolerance
    return (low**0.5, max(high, 0.0) ** 0.5) if squared else (low, high)


def corridors(filter: Filter, rate_hz: Fraction, timing: Timing) -> list[Corridor]:
    """The bands that drive a design as corridors in rising order.

    Under zero-phase timing the square is judged: the nominal gains are then roots, and a
    tolerance in dB is halved.

    Raises:
        SpecError: fewer than two bands; edges past half the rate; bands that meet or cross; a
            tolerance that leaves no room; gains that do not differ.
    """
    rate, squared = float(rate_hz), timing == "zero-phase"
    if len(filter.bands) < 2:
        raise SpecError(
            Problem(
                filter.place("bands"),
                f"{len(filter.bands)} band(s) for filter {filter.name} ({filter.method})",
                "at least two, with room between them",
                "state what must pass and what must not",
            )
        )
    edges = all_band_edges(filter.bands, rate)
    made = []
    for band, (low_hz, high_hz) in zip(filter.bands, edges, strict=True):
        low, high = magnitude_bounds(band, squared)
        nominal = band.gain**0.5 if squared else band.gain
        made.append(Corridor(band, low_hz, high_hz, low, high, nominal))
    made.sort(key=lambda corridor: corridor.low_hz)
    problems = [
        Problem(
            str(corridor.band.place or filter.place("bands")),
            f"a tolerance of {corridor.band.tolerance:g} about gain {corridor.band.gain:g}",
            "a tolerance above 0 (about gain 0 in dB: negative)",
            "state how far the gain may deviate",
        )
        for corridor in made
        if not corridor.ripple > 0
    ]
    problems += [
        Problem(
            str(upper.band.place or filter.place("bands")),
            f"a band from {upper.low_hz:.10g} Hz beside one that ends at {lower.high_hz:.10g} Hz",
            "room between neighbouring bands, in which nothing is asked",
            "move the edges apart",
        )
        for lower, upper in pairwise(made)
        if lower.high_hz >= upper.low_hz
    ]
    if len({corridor.nominal for corridor in made}) == 1:
        problems.append(
            Problem(
                filter.place("bands"),
                f"gain {made[0].band.gain:g} in every band",
                "bands with different gains",
                "state what must pass and what must not",
            )
        )
    if problems:
        raise SpecError(*problems)
    return made
