"""Windowed ideal responses: any named window, and Kaiser's window sized by tolerances."""

from __future__ import annotations

import warnings
from collections.abc import Sequence
from dataclasses import dataclass
from difflib import get_close_matches
from fractions import Fraction
from itertools import pairwise
from math import ceil, log10, pi
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pipeline_filters.design.compliance import BandFinding, check_bands, taps_magnitude
from pipeline_filters.design.contract import TapsResponse
from pipeline_filters.design.given_taps import is_linear_phase
from pipeline_filters.design.settings import (
    corner_settings,
    shape_setting,
    together,
    typed,
    whole_samples,
)
from pipeline_filters.design.targets import Corridor, corridors
from pipeline_filters.design.verdicts import unmet
from pipeline_filters.errors import Problem, SpecError, ToleranceError
from pipeline_filters.spec.model import Filter, Timing

MOST_KAISER_TAPS = 1 << 16
# Relative to a step in gain: finer ripple drowns in the rounding of double precision.
FINEST_RIPPLE = 1e-13
_GAINS = {
    "low-pass": (1.0, 0.0),
    "high-pass": (0.0, 1.0),
    "band-pass": (0.0, 1.0, 0.0),
    "band-stop": (1.0, 0.0, 1.0),
}


def ideal_taps(
    length: int, steps_hz: Sequence[float], gains: Sequence[float], rate_hz: float
) -> NDArray[np.float64]:
    """The middle ``length`` taps of the response with piecewise constant gains.

    A sum of ideal low-passes sin(w m)/(pi m), weighted by the steps in gain (Oppenheim and
    Schafer, Discrete-Time Signal Processing, section 7.5).

    Args:
        length: taps; odd where the last gain is not 0.
        steps_hz: where the gain steps, rising.
        gains: one more than steps.
        rate_hz: samples a second.

    Returns:
        shape (length,), float64, symmetric.
    """
    m = np.arange(length) - (length - 1) / 2
    taps: NDArray[np.float64] = gains[-1] * np.sinc(m)
    for step_hz, (below, above) in zip(steps_hz, pairwise(gains), strict=True):
        share = 2 * step_hz / rate_hz
        taps += (below - above) * share * np.sinc(share * m)
    return taps


def design_window(filter: Filter, rate_hz: Fraction, timing: Timing) -> TapsResponse:
    """An ideal response cut by a named window of scipy.signal, its corners at -6 dB.

    Scaled to magnitude 1 at 0 Hz (low-pass, band-stop), at half the rate (high-pass), or
    midway between the corners (band-pass).

    Raises:
        SpecError: settings that make no such filter, among them an even length for a
            high-pass or band-stop, whose taps could only be zero at half the rate.
    """
    rate, shape = float(rate_hz), shape_setting(filter)
    (length, corners_hz), window = together(
        lambda: together(
            lambda: _length(filter, rate_hz, shape),
            lambda: corner_settings(filter, rate_hz, shape),
        ),
        lambda: typed(filter, "window", tuple),
    )
    taps = ideal_taps(length, corners_hz, _GAINS[shape], rate) * _window(filter, window, length)
    at_hz = {"high-pass": rate / 2, "band-pass": sum(corners_hz) / 2}.get(shape, 0.0)
    m = np.arange(length) - (length - 1) / 2
    scale = float(taps @ np.cos(2 * pi * at_hz / rate * m))
    if not np.isfinite(taps).all() or not abs(scale) > FINEST_RIPPLE:
        raise SpecError(
            Problem(
                filter.place("window"),
                f"window {_named(window)} of {length} samples leaves nothing at {at_hz:.6g} Hz",
                "a window that passes what the shape passes",
                "state a longer length, or another window",
            )
        )
    taps = taps / scale
    levels = 20 * np.log10(np.maximum(taps_magnitude(taps, np.array(corners_hz), rate), 1e-15))
    reads = " and ".join(
        f"{level:.2f} dB at {corner:.6g} Hz"
        for level, corner in zip(levels, corners_hz, strict=True)
    )
    notes = [f"window: {_named(window)}, {length} taps, {shape}, {reads}"]
    if timing == "zero-phase":
        notes.append("window: run forward and backward it reads twice as many dB at its corners")
    return TapsResponse(taps, is_linear_phase(taps), tuple(notes))


def _length(filter: Filter, rate_hz: Fraction, shape: str) -> int:
    length = whole_samples(filter, "length", rate_hz)
    if length % 2 == 0 and _GAINS[shape][-1] != 0:
        raise SpecError(
            Problem(
                filter.place("length"),
                f"an even length of {length} samples for shape {shape}",
                "an odd length: an even number of symmetric taps is zero at half the rate",
                f"state {length + 1} samples",
            )
        )
    return length


def _named(window: tuple[object, ...]) -> str:
    return " ".join(str(part) for part in window)


def _window(filter: Filter, window: tuple[object, ...], length: int) -> NDArray[np.float64]:
    from scipy.signal import get_window, windows  # long to load, so only where it is asked for

    name = str(window[0]) if window else ""
    # The types of its parameters are its own to judge, one by one.
    stated: Any = name if len(window) == 1 else window
    try:
        with warnings.catch_warnings():
            # They caution about spectral analysis; a filter's response is stated instead.
            warnings.simplefilter("ignore")
            return np.asarray(get_window(stated, length, fftbins=False), np.float64)
    except Exception as error:  # of many types, each about the window as stated
        known = [known for known in windows.__all__ if known != "get_window"]
        near = get_close_matches(name, known, n=1)
        raise SpecError(
            Problem(
                filter.place("window"),
                f"window {_named(window)}: {' '.join(str(error).split())}",
                "a window of scipy.signal.windows with its parameters",
                f"did you mean {near[0]}?"
                if near and near[0] != name
                else "state the window with the parameters that it takes",
            )
        ) from None


def kaiser_beta(attenuation_db: float) -> float:
    """Kaiser's beta for a ripple that many dB below the step in gain.

    Kaiser 1974; Oppenheim and Schafer, Discrete-Time Signal Processing, section 7.6.
    """
    if attenuation_db > 50:
        return 0.1102 * (attenuation_db - 8.7)
    if attenuation_db >= 21:
        over_db = attenuation_db - 21
        return float(0.5842 * over_db**0.4 + 0.07886 * over_db)
    return 0.0


def kaiser_attenuation(length: int, width: float) -> float:
    """The dB of ripple that Kaiser's formula expects of a length: 7.95 + 2.285 dw (P - 1).

    Kaiser 1974 (14.36 dF, dw = 2 pi dF), as in scipy.signal.kaiserord; Oppenheim and Schafer
    round 7.95 to 8.

    Args:
        length: P taps.
        width: dF, the room between bands over the sample rate.
    """
    return 7.95 + 2.285 * 2 * pi * width * (length - 1)


def kaiser_length(attenuation_db: float, width: float) -> int:
    """The taps that `kaiser_attenuation` asks for; below 21 dB as many as at 21 dB."""
    return ceil((max(attenuation_db, 21.0) - 7.95) / (2.285 * 2 * pi * width)) + 1


@dataclass(frozen=True)
class KaiserPlan:
    """Kaiser's design before its length is settled.

    Attributes:
        steps_hz, gains: of the ideal response; a step midway between two bands.
        attenuation_db: of the strictest ripple against the step beside it.
        width: the narrowest room about a step, over the sample rate.
        rate_hz: samples a second.
    """

    steps_hz: tuple[float, ...]
    gains: tuple[float, ...]
    attenuation_db: float
    width: float
    rate_hz: float

    def beta(self, length: int) -> float:
        """Kaiser's beta; what a greater length than estimated can buy goes into ripple."""
        return kaiser_beta(max(self.attenuation_db, kaiser_attenuation(length, self.width)))

    def taps(self, length: int) -> NDArray[np.float64]:
        """The windowed ideal response, shape (length,), symmetric."""
        window = np.kaiser(length, self.beta(length))
        return ideal_taps(length, self.steps_hz, self.gains, self.rate_hz) * window


def kaiser_plan(bands: Sequence[Corridor], rate_hz: float) -> KaiserPlan:
    """Kaiser's design for bands in rising order.

    A window gives the same ripple on both sides of a step, in proportion to the step: the
    smallest tolerance over its step decides.
    """
    steps = [(lower, upper) for lower, upper in pairwise(bands) if lower.nominal != upper.nominal]
    relative = min(
        min(lower.ripple, upper.ripple) / abs(lower.nominal - upper.nominal)
        for lower, upper in steps
    )
    return KaiserPlan(
        tuple((lower.high_hz + upper.low_hz) / 2 for lower, upper in steps),
        (bands[0].nominal, *(upper.nominal for _, upper in steps)),
        -20 * log10(relative),
        min(upper.low_hz - lower.high_hz for lower, upper in steps) / rate_hz,
        rate_hz,
    )


def design_kaiser(filter: Filter, rate_hz: Fraction, timing: Timing) -> TapsResponse:
    """Kaiser's window sized by the bands, verified, and lengthened until they are truly met.

    Length and beta are estimated by Kaiser's formulas. Where the true response misses a
    band, the length grows by doubling steps until it meets them all, and is then halved
    back to near the shortest that does. Lengths are odd where the gain at half the rate is
    not 0.

    Raises:
        SpecError: fewer than two bands, or bands that no filter can be made from.
        ToleranceError: not met with up to 65,536 taps, or a ripple finer than double
            precision can keep, 1e-13 of a step in gain.
    """
    rate, squared = float(rate_hz), timing == "zero-phase"
    plan = kaiser_plan(corridors(filter, rate_hz, timing), rate)
    finest_db = -20 * log10(FINEST_RIPPLE)
    if plan.attenuation_db > finest_db:
        raise ToleranceError(
            Problem(
                filter.place("bands"),
                f"filter {filter.name} (kaiser): a ripple {plan.attenuation_db:.4g} dB below the "
                "step in gain beside it",
                f"double precision keeps {finest_db:.4g} dB",
                "widen the tolerance",
            )
        )
    stride = 2 if plan.gains[-1] > 0 else 1
    estimate = kaiser_length(plan.attenuation_db, plan.width)
    if stride == 2:
        estimate |= 1

    def missed_by(length: int) -> tuple[BandFinding, ...]:
        response = TapsResponse(plan.taps(length), True)
        findings = check_bands([response], filter.bands, rate, squared)
        return tuple(finding for finding in findings if not finding.complies)

    longest = MOST_KAISER_TAPS - (stride - 1)
    too_short, length, step = estimate - stride, min(estimate, longest), stride
    while missed := missed_by(length):
        if length == longest:
            raise unmet(filter, missed, squared=squared, within=f"{MOST_KAISER_TAPS} taps")
        too_short, length, step = length, min(length + step, longest), 2 * step
    while length - too_short > stride:
        middle = too_short + (length - too_short) // (2 * stride) * stride
        if missed_by(middle):
            too_short = middle
        else:
            length = middle
    note = f"kaiser: {length} taps, beta {plan.beta(length):.4f}, {plan.attenuation_db:.2f} dB"
    if length != estimate:
        note += f" (estimate {estimate}, lengthened by {length - estimate})"
    return TapsResponse(plan.taps(length), True, (note,))
