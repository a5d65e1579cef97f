"""Windowed ideal responses: any named window, and Kaiser's window sized by tolerances."""

from __future__ import annotations

import itertools
from fractions import Fraction
from math import ceil, log10, pi

import numpy as np
from numpy.typing import NDArray
from scipy.signal import get_window
from scipy.signal.windows import kaiser

from pipeline_filters.design.compliance import check_bands, linear_bounds
from pipeline_filters.design.contract import Response, TapsResponse
from pipeline_filters.design.settings import amount_setting, corner_settings, whole_samples
from pipeline_filters.design.verdicts import (
    bands_of,
    refuse_unmet,
    sorted_bands,
)
from pipeline_filters.errors import Problem, SpecError
from pipeline_filters.spec.model import Band, Filter, Timing

MOST_KAISER_TAPS = 1 << 16


def ideal_taps(
    length: int, edges_hz: NDArray[np.float64], gains: NDArray[np.float64], rate_hz: float
) -> NDArray[np.float64]:
    """The ideal multiband response of ``length`` taps, centred.

    Piecewise constant gains between edges; with one gain more than edges. A sum of ideal
    low-passes sin(w m)/(pi m), weighted by the steps between gains (Oppenheim and Schafer,
    Discrete-Time Signal Processing, section 7.5).
    """
    m = np.arange(length) - (length - 1) / 2
    taps: NDArray[np.float64] = gains[-1] * np.sinc(m)
    for edge_hz, below, above in zip(edges_hz, gains[:-1], gains[1:], strict=True):
        share = 2 * edge_hz / rate_hz
        taps += (below - above) * share * np.sinc(share * m)
    return taps


def design_window(filter: Filter, rate_hz: Fraction, timing: Timing) -> Response:
    """An ideal response cut by a named window; its corner is at the -6 dB point.

    A pass band that holds 0 Hz is scaled to 1 there, one that ends at half the rate to 1
    there, a band-pass to 1 in its middle.
    """
    del timing
    shape = str(filter.settings["shape"])
    rate = float(rate_hz)
    length = whole_samples(filter, "length", amount_setting(filter, "length"), rate_hz)
    corners = corner_settings(filter, rate_hz, shape)
    if length % 2 == 0 and shape in ("high-pass", "band-stop"):
        raise SpecError(
            Problem(
                filter.place("length"),
                f"{length} samples for shape {shape}",
                "an odd length: even symmetric taps are zero at half the rate",
                f"state {length + 1} samples",
            )
        )
    name = filter.settings["window"]
    assert isinstance(name, tuple)
    try:
        window = get_window(name[0] if len(name) == 1 else name, length, fftbins=False)
    except Exception as error:  # scipy raises many kinds here, each about the window
        raise SpecError(
            Problem(
                filter.place("window"),
                f"window {' '.join(map(str, name))}: {error}",
                "a window of scipy.signal.windows with its parameters",
                "see scipy.signal.get_window for what it takes",
            )
        ) from None
    gains = {
        "low-pass": [1, 0],
        "high-pass": [0, 1],
        "band-pass": [0, 1, 0],
        "band-stop": [1, 0, 1],
    }[shape]
    taps = ideal_taps(length, np.array(corners), np.array(gains, float), rate) * window
    at_hz = {"high-pass": rate / 2, "band-pass": sum(corners) / 2}.get(shape, 0.0)
    m = np.arange(length) - (length - 1) / 2
    taps = taps / float(taps @ np.cos(2 * pi * at_hz / rate * m))
    return TapsResponse(taps, True, (f"{name[0]} window, {length} taps",))


def kaiser_beta(attenuation_db: float) -> float:
    """Kaiser's beta for a ripple of ``attenuation_db`` (Kaiser 1974; Oppenheim and Schafer 7.6)."""
    if attenuation_db > 50:
        return 0.1102 * (attenuation_db - 8.7)
    if attenuation_db >= 21:
        over_db = attenuation_db - 21
        return float(0.5842 * over_db**0.4 + 0.07886 * over_db)
    return 0.0


def kaiser_length(attenuation_db: float, width_hz: float, rate_hz: float) -> int:
    """Kaiser's estimate of the taps: (A - 7.95)/(14.36 dF) + 1, dF the transition over the rate."""
    return max(1, ceil((attenuation_db - 7.95) / (14.36 * width_hz / rate_hz)) + 1)


def design_kaiser(filter: Filter, rate_hz: Fraction, timing: Timing) -> Response:
    """Kaiser's window sized by the bands, verified, and lengthened until they are truly met.

    The ripple of a windowed response is the same on both sides of a step, in proportion to
    it: the smallest tolerance over the step beside it sets beta.

    Raises:
        SpecError: fewer than two bands, or bands without room between them.
        ToleranceError: not met with up to 65,536 taps.
    """
    rate = float(rate_hz)
    squared = timing == "zero-phase"
    bands = sorted_bands(bands_of(filter, least=2), filter, rate)
    bounds = [linear_bounds(band, squared) for band in bands]
    gains = np.array(
        [
            (low + high) / 2 if band.gain else 0.0
            for band, (low, high) in zip(bands, bounds, strict=True)
        ]
    )
    ripples = [
        (high - low) / 2 if band.gain else high
        for band, (low, high) in zip(bands, bounds, strict=True)
    ]
    edges, widths = _steps(bands)
    steps = np.abs(np.diff(gains))
    relative = (
        min(min(ripples[i], ripples[i + 1]) / step for i, step in enumerate(steps) if step > 0)
        if steps.any()
        else 1.0
    )
    attenuation = -20 * log10(min(relative, 0.999))
    odd_only = gains[-1] > 0
    estimate = kaiser_length(attenuation, min(widths), rate)
    if odd_only and estimate % 2 == 0:
        estimate += 1
    length, extra_db = estimate, 0.0
    while length <= MOST_KAISER_TAPS:
        beta = kaiser_beta(attenuation + extra_db)
        taps = ideal_taps(length, edges, gains, rate) * kaiser(length, beta, sym=True)
        response = TapsResponse(
            taps,
            True,
            (
                f"kaiser: {attenuation:.2f} dB, beta {beta:.4f}, {length} taps"
                + (f" (estimate {estimate}, lengthened until met)" if length != estimate else ""),
            ),
        )
        findings = check_bands([response], bands, rate, squared)
        if all(finding.complies for finding in findings):
            return response
        # A little more length gives room for a little more beta: both grow together.
        length += (2 if odd_only else 1) * max(1, length // 200)
        extra_db = (length - estimate) * 14.36 * min(widths) / rate * 0.9
    return refuse_unmet(filter, findings, f"{MOST_KAISER_TAPS} taps")


def _steps(bands: list[Band]) -> tuple[NDArray[np.float64], list[float]]:
    """The middle and the width of the room between neighbouring bands."""
    edges, widths = [], []
    for lower, upper in itertools.pairwise(bands):
        assert lower.high_hz is not None
        edges.append((lower.high_hz + upper.low_hz) / 2)
        widths.append(upper.low_hz - lower.high_hz)
    return np.array(edges), widths
