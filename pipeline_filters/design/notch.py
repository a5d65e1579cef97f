"""The notch: a second-order recursion with a zero on the unit circle."""

from __future__ import annotations

from fractions import Fraction
from math import acos, cos, pi, sqrt, tan

import numpy as np

from pipeline_filters.design.contract import SectionsResponse
from pipeline_filters.design.impulse import refuse_restless
from pipeline_filters.design.settings import frequency_setting, together
from pipeline_filters.spec.model import Filter, Timing


def design_notch(filter: Filter, rate_hz: Fraction, timing: Timing) -> SectionsResponse:
    """A notch that is zero at ``centre`` and half power at two points ``width`` apart.

    The bilinear image of (s^2 + c^2)/(s^2 + s B + c^2) with c = tan(w0/2), w0 the centre in
    radians a sample. |H|^2 is 1/2 where |c^2 - v^2| = B v, v = tan(w/2), that is at
    v2 - v1 = B and v1 v2 = c^2; then tan((w2 - w1)/2) = (v2 - v1)/(1 + v1 v2) = B/(1 + c^2).
    So B = (1 + c^2) tan(pi width/rate) sets the half-power points exactly ``width`` apart,
    and dividing out 1 + c^2 leaves, with t = tan(pi width/rate),

        H(z) = (1 - 2 cos(w0) z^-1 + z^-2) / ((1 + t) - 2 cos(w0) z^-1 + (1 - t) z^-2).

    The points have the centre as their geometric mean on the warped axis, so they lie
    unevenly about it, and always between 0 and half the rate.

    Raises:
        SpecError: a centre or a width not between 0 and half the rate, or a notch so narrow
            that it does not come to rest within 2^24 samples.
    """
    centre, width = together(
        lambda: frequency_setting(filter, "centre", rate_hz),
        lambda: frequency_setting(filter, "width", rate_hz),
    )
    spread = pi * float(width / rate_hz)
    turn, t = cos(2 * pi * float(centre / rate_hz)), tan(spread)
    sections = np.array([[1, -2 * turn, 1, 1 + t, -2 * turn, 1 - t]]) / (1 + t)
    sections[0, 3] = 1.0
    # cos((w1 + w2)/2) = cos(w0) cos((w2 - w1)/2), from the two conditions above.
    middle = acos(turn * cos(spread))
    points_hz = np.array([middle - spread, middle + spread]) * float(rate_hz) / (2 * pi)
    refuse_restless(sections, where=filter.place("width"))
    notes = [
        f"notch: {float(centre):.10g} Hz, half power at {points_hz[0]:.6g} Hz and "
        f"{points_hz[1]:.6g} Hz, pole radius {sqrt(abs(sections[0, 5])):.6g}"
    ]
    if timing == "zero-phase":
        notes.append("notch: run forward and backward it reads -6.02 dB at its half-power points")
    return SectionsResponse(sections, filter.settle, tuple(notes))
