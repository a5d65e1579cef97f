"""A filter's settings, typed, with refusals that name their place."""

from __future__ import annotations

from fractions import Fraction
from math import ceil, floor

from pipeline_filters.errors import Problem, SpecError
from pipeline_filters.spec.model import Amount, Filter

# The longest filter that any method makes.
MOST_TAPS = 1 << 20


def amount_setting(filter: Filter, key: str) -> Amount:
    """A length of time among the settings."""
    value = filter.settings[key]
    assert isinstance(value, Amount)
    return value


def frequency_setting(filter: Filter, key: str, rate_hz: Fraction) -> float:
    """A frequency in Hz, strictly between 0 and half the rate.

    Raises:
        SpecError: it is not.
    """
    value = filter.settings[key]
    assert isinstance(value, Fraction)
    _refuse_outside(filter, key, value, rate_hz)
    return float(value)


def corner_settings(filter: Filter, rate_hz: Fraction, shape: str) -> list[float]:
    """The corners in Hz: one, or two ascending ones for a band shape.

    Raises:
        SpecError: the wrong count or order, or a corner outside (0, rate/2).
    """
    corners = filter.settings["corners"]
    assert isinstance(corners, tuple)
    count = 2 if shape.startswith("band") else 1
    if len(corners) != count:
        raise SpecError(
            Problem(
                filter.place("corners"),
                f"{len(corners)} corners for shape {shape}",
                f"{count} for this shape",
                "state " + ("[lower, upper]" if count == 2 else "a single one"),
            )
        )
    for corner in corners:
        _refuse_outside(filter, "corners", corner, rate_hz)
    if count == 2 and not corners[0] < corners[1]:
        raise SpecError(
            Problem(filter.place("corners"), "corners that do not rise", "lower < upper")
        )
    return [float(corner) for corner in corners]


def _refuse_outside(filter: Filter, key: str, value: Fraction, rate_hz: Fraction) -> None:
    if not 0 < value < rate_hz / 2:
        raise SpecError(
            Problem(
                filter.place(key),
                f"{key} {float(value):g} Hz at a sample rate of {float(rate_hz):g} Hz",
                f"above 0 and below half the rate, {float(rate_hz / 2):g} Hz",
                "state a lower frequency",
            )
        )


def whole_samples(filter: Filter, key: str, amount: Amount, rate_hz: Fraction) -> int:
    """A length as a whole number of samples, at least 1.

    Raises:
        SpecError: it is not whole, too small or too large.
    """
    samples = amount.in_samples(rate_hz)
    if samples.denominator != 1 or not 1 <= samples <= MOST_TAPS:
        near = min(max(1, floor(samples)), MOST_TAPS)
        raise SpecError(
            Problem(
                filter.place(key),
                f"{key} {amount.text} is {float(samples):g} samples at {float(rate_hz):g} Hz",
                f"a whole number of samples, 1 to {MOST_TAPS}",
                f"state {near} samples"
                + (
                    f" or {ceil(samples)} samples"
                    if near != ceil(samples) and ceil(samples) <= MOST_TAPS
                    else ""
                ),
            )
        )
    return int(samples)
