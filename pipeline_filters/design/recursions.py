"""Recursions by the bilinear transform: Butterworth, and the notch."""

from __future__ import annotations

import itertools
from fractions import Fraction
from math import ceil, cos, log10, pi, tan
from typing import Literal

import numpy as np
from scipy.signal import butter

from pipeline_filters.design.compliance import BandFinding, check_bands, linear_bounds
from pipeline_filters.design.contract import Response, SectionsResponse
from pipeline_filters.design.settings import corner_settings, frequency_setting
from pipeline_filters.design.verdicts import bands_of, refuse_unmet, sorted_bands
from pipeline_filters.errors import Problem, SpecError
from pipeline_filters.spec.model import Band, Filter, Timing

MOST_ORDER = 24
_ScipyShape = Literal["lowpass", "highpass", "bandpass", "bandstop"]
_SCIPY_SHAPE: dict[str, _ScipyShape] = {
    "low-pass": "lowpass",
    "high-pass": "highpass",
    "band-pass": "bandpass",
    "band-stop": "bandstop",
}


def design_butterworth(filter: Filter, rate_hz: Fraction, timing: Timing) -> Response:
    """Butterworth sections, from order, shape and corners, or from bands.

    A corner is the half-power frequency, kept exact by prewarping. From bands, the lowest
    order is taken for which the prototype |H|^2 = 1/(1 + (w/wc)^2n) can meet them; the pass
    band's edge is met exactly and what the order has to spare falls to the stop band.

    Raises:
        SpecError: order and bands together, or neither; bands that make no such shape.
        ToleranceError: not met with an order of up to 24.
    """
    if "order" in filter.settings:
        shape = str(filter.settings["shape"])
        corners = corner_settings(filter, rate_hz, shape)
        order = filter.settings["order"]
        assert isinstance(order, int)
        notes = [f"butterworth: order {order}, {shape}"]
        if timing == "zero-phase":
            notes.append("run forward and backward, it reads -6.02 dB at its corners")
        at = corners[0] if len(corners) == 1 else corners
        sections = butter(order, at, _SCIPY_SHAPE[shape], fs=float(rate_hz), output="sos")
        return SectionsResponse(sections, filter.settle, tuple(notes))
    return _from_bands(filter, float(rate_hz), timing == "zero-phase")


def _from_bands(filter: Filter, rate_hz: float, squared: bool) -> Response:
    bands = sorted_bands(bands_of(filter, least=2), filter, rate_hz)
    pattern = "".join("1" if band.gain else "0" for band in bands)
    shape = {"10": "low-pass", "01": "high-pass", "010": "band-pass", "101": "band-stop"}.get(
        pattern
    )
    passing = [band for band in bands if band.gain]
    if shape is None or any(band.gain != 1 for band in passing):
        raise SpecError(
            Problem(
                filter.place("bands"),
                "bands with gains " + ", ".join(f"{band.gain:g}" for band in bands),
                "gains 1 and 0 in the pattern of a low-, high- or band-pass or a band-stop",
                "use kaiser or equiripple for other patterns",
            )
        )
    lows = [linear_bounds(band, squared)[0] for band in passing]
    highs = [linear_bounds(band, squared)[1] for band in bands if not band.gain]
    pass_loss = max(lows) ** -2 - 1  # eps^2 of the strictest pass band
    stop_loss = min(highs) ** -2 - 1
    if pass_loss <= 0:
        raise SpecError(
            Problem(filter.place("bands"), "a pass band without tolerance", "more than 0")
        )
    pass_edges, ratio = _prototype(bands, shape, rate_hz)
    order = max(1, ceil(log10(stop_loss / pass_loss) / (2 * log10(ratio)) - 1e-9))
    findings: tuple[BandFinding, ...] = ()
    for trial in range(order, MOST_ORDER + 1):
        corners = _corners(pass_edges, shape, pass_loss ** (-1 / (2 * trial)), rate_hz)
        sections = butter(trial, corners, _SCIPY_SHAPE[shape], fs=rate_hz, output="sos")
        response = SectionsResponse(
            sections,
            filter.settle,
            (
                f"butterworth: order {trial}, {shape}, corners "
                + ", ".join(f"{c:.6g} Hz" for c in np.atleast_1d(corners))
                + "; pass-band edge met exactly, the slack in the stop band",
            ),
        )
        findings = check_bands([response], bands, rate_hz, squared)
        if all(finding.complies for finding in findings):
            return response
    if findings:
        return refuse_unmet(filter, findings, f"order {MOST_ORDER}")
    raise SpecError(
        Problem(
            filter.place("bands"),
            f"order {order} would be needed",
            f"an order up to {MOST_ORDER}",
            "widen the room between bands, or use kaiser or equiripple",
        )
    )


def _warped(freq_hz: float, rate_hz: float) -> float:
    return tan(pi * min(freq_hz, rate_hz / 2 * (1 - 1e-12)) / rate_hz)


def _prototype(bands: list[Band], shape: str, rate_hz: float) -> tuple[list[float], float]:
    """The pass edges in Hz, and how far out the stop edge lies for a low-pass prototype."""
    edges = [
        edge
        for lower, upper in itertools.pairwise(bands)
        for edge in (lower.high_hz or 0.0, upper.low_hz)
    ]
    warped = [_warped(edge, rate_hz) for edge in edges]
    if shape == "low-pass":
        return [edges[0]], warped[1] / warped[0]
    if shape == "high-pass":
        return [edges[1]], warped[1] / warped[0]
    stop_low, pass_low, pass_high, stop_high = warped
    if shape == "band-stop":
        pass_low, stop_low, stop_high, pass_high = warped
        middle, width = pass_low * pass_high, pass_high - pass_low
        return [edges[0], edges[3]], min(
            abs(width * stop / (stop**2 - middle)) if stop**2 != middle else np.inf
            for stop in (stop_low, stop_high)
        )
    middle, width = pass_low * pass_high, pass_high - pass_low
    return [edges[1], edges[2]], min(
        abs((stop**2 - middle) / (width * stop)) for stop in (stop_low, stop_high)
    )


def _corners(
    pass_edges: list[float], shape: str, factor: float, rate_hz: float
) -> float | list[float]:
    """The half-power corners for which the response at the pass edges is just allowed.

    ``factor`` is the prototype's half-power frequency over its pass edge.
    """
    warped = [_warped(edge, rate_hz) for edge in pass_edges]

    def back(value: float) -> float:
        return float(np.arctan(value)) * rate_hz / pi

    if shape == "low-pass":
        return back(warped[0] * factor)
    if shape == "high-pass":
        return back(warped[0] / factor)
    middle, width = warped[0] * warped[1], warped[1] - warped[0]
    width = width * factor if shape == "band-pass" else width / factor
    root = (width**2 + 4 * middle) ** 0.5
    return [back((root - width) / 2), back((root + width) / 2)]


def design_notch(filter: Filter, rate_hz: Fraction, timing: Timing) -> Response:
    """A second-order notch whose half-power points lie exactly ``width`` apart.

    H(z) = (1 + a)/2 * (1 - 2 b z^-1 + z^-2) / (1 - b (1 + a) z^-1 + a z^-2), with
    b = cos(w0) and a = (1 - t)/(1 + t), t = tan(width * pi / rate): the bilinear image of
    (s^2 + w^2)/(s^2 + s*B + w^2), whose half-power points keep the stated distance in
    digital frequency (Regalia, Mitra and Vaidyanathan 1988; from memory).
    """
    rate = float(rate_hz)
    centre = frequency_setting(filter, "centre", rate_hz)
    width = frequency_setting(filter, "width", rate_hz)
    low = centre - width / 2
    if low <= 0 or centre + width / 2 >= rate / 2:
        raise SpecError(
            Problem(
                filter.place("width"),
                f"a notch of {width:g} Hz about {centre:g} Hz",
                f"between 0 and half the rate, {rate / 2:g} Hz",
                "state a smaller width",
            )
        )
    t = tan(pi * width / rate)
    a, b = (1 - t) / (1 + t), cos(2 * pi * centre / rate)
    gain = (1 + a) / 2
    sections = np.array([[gain, -2 * b * gain, gain, 1.0, -b * (1 + a), a]])
    notes = [f"notch: {centre:g} Hz, {width:g} Hz between its half-power points"]
    if timing == "zero-phase":
        notes.append("run forward and backward, the stated width is between its -6.02 dB points")
    return SectionsResponse(sections, filter.settle, tuple(notes))
