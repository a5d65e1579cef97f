"""Equiripple taps: the shortest that meet the bands (Parks and McClellan 1972)."""

from __future__ import annotations

import itertools
from fractions import Fraction
from math import log10

import numpy as np
from scipy.signal import remez

from pipeline_filters.design.compliance import BandFinding, check_bands, linear_bounds
from pipeline_filters.design.contract import Response, TapsResponse
from pipeline_filters.design.verdicts import bands_of, refuse_unmet, sorted_bands
from pipeline_filters.spec.model import Band, Filter, Timing

MOST_EQUIRIPPLE_TAPS = 2000


def estimated_length(ripple_1: float, ripple_2: float, width: float) -> int:
    """Herrmann, Rabiner and Chan's estimate of the taps of a low-pass (1973).

    Args:
        ripple_1, ripple_2: of the pass band and the stop band, linear.
        width: the transition over the sample rate.
    """
    big, small = max(ripple_1, ripple_2), min(ripple_1, ripple_2)
    one, two = log10(min(big, 0.5)), log10(min(small, 0.5))
    d_inf = (0.005309 * one**2 + 0.07114 * one - 0.4761) * two
    d_inf -= 0.00266 * one**2 + 0.5941 * one + 0.4278
    f = 11.01217 + 0.51244 * (one - two)
    return max(3, round(d_inf / width - f * width + 1))


def design_equiripple(filter: Filter, rate_hz: Fraction, timing: Timing) -> Response:
    """The shortest linear-phase taps whose weighted error is equal and within the bands.

    Lengths are tried upwards from below the estimate, by doubling steps until one meets the
    bands, then by halving; the neighbours below the shortest found are tried as well, since
    the two parities do not fall in step. Even lengths are passed over where the gain at
    half the rate is not 0.

    Raises:
        ToleranceError: not met with up to 2,000 taps.
    """
    rate = float(rate_hz)
    squared = timing == "zero-phase"
    bands = sorted_bands(bands_of(filter, least=2), filter, rate)
    search = _Search(bands, rate, squared)
    ripples = [ripple for _, ripple in search.targets]
    widths = [upper.low_hz - (lower.high_hz or 0) for lower, upper in itertools.pairwise(bands)]
    start = max(3, int(0.85 * estimated_length(max(ripples), min(ripples), min(widths) / rate)))
    low, high, step = start - 1, start, 2
    while not search.meets(high):
        low = high
        if high >= MOST_EQUIRIPPLE_TAPS:
            return refuse_unmet(filter, search.nearest, f"{MOST_EQUIRIPPLE_TAPS} taps")
        high, step = min(high + step, MOST_EQUIRIPPLE_TAPS), 2 * step
    if low < start:
        low = 2
    while high - low > 1:
        middle = (low + high) // 2
        if search.meets(middle):
            high = middle
        elif middle + 1 < high and search.meets(middle + 1):
            high = middle + 1
        else:
            low = middle
    for shorter in range(max(3, high - 4), high):
        if search.meets(shorter):
            high = shorter
            break
    taps = search.found[high]
    assert taps is not None
    return TapsResponse(taps, True, (f"equiripple: {high} taps, the shortest that meet the bands",))


class _Search:
    """Designs of trial lengths, each made once."""

    def __init__(self, bands: list[Band], rate_hz: float, squared: bool) -> None:
        self.bands = bands
        self.rate_hz = rate_hz
        self.squared = squared
        self.found: dict[int, np.ndarray | None] = {}
        self.nearest: tuple[BandFinding, ...] = ()
        self.targets: list[tuple[float, float]] = []
        for band in bands:
            low, high = linear_bounds(band, squared)
            self.targets.append(((low + high) / 2, (high - low) / 2) if band.gain else (0.0, high))

    def meets(self, length: int) -> bool:
        """Whether taps of this length meet the bands."""
        if length not in self.found:
            self.found[length] = self._design(length)
        return self.found[length] is not None

    def _design(self, length: int) -> np.ndarray | None:
        if (
            length % 2 == 0
            and self.bands[-1].high_hz in (None, self.rate_hz / 2)
            and self.targets[-1][0] > 0
        ):
            return None
        edges = []
        for band in self.bands:
            edges += [band.low_hz, self.rate_hz / 2 if band.high_hz is None else band.high_hz]
        gains = [gain for gain, _ in self.targets]
        weights = [1 / ripple for _, ripple in self.targets]
        largest = min(weights)
        weights = [weight / largest for weight in weights]
        for density in (16, 32, 64):
            try:
                taps = remez(
                    length,
                    edges,
                    gains,
                    weight=weights,
                    fs=self.rate_hz,
                    grid_density=density,
                    maxiter=100,
                )
            except ValueError:  # it did not converge on this grid
                continue
            taps = (taps + taps[::-1]) / 2
            if not np.isfinite(taps).all():
                continue
            findings = check_bands(
                [TapsResponse(taps, True)], self.bands, self.rate_hz, self.squared
            )
            if all(finding.complies for finding in findings):
                return taps
            self.nearest = findings
            # Only a near miss can be the grid's doing.
            if any(_misses_widely(finding) for finding in findings):
                return None
        return None


def _misses_widely(finding: BandFinding) -> bool:
    if finding.complies:
        return False
    margin = 0.5 if finding.band.decibels else 0.06 * finding.limit
    if finding.band.decibels and finding.band.gain:
        margin = 0.06 * finding.limit
    return finding.deviation > finding.limit + margin
