"""A filter's settings, typed, with refusals that name their place."""

from __future__ import annotations

from collections.abc import Callable
from fractions import Fraction
from math import ceil, floor
from typing import TypeVar

from pipeline_filters.errors import Problem, SpecError
from pipeline_filters.spec.model import Amount, Filter

# The longest filter that any method makes.
MOST_TAPS = 1 << 20
# Corners that each shape takes.
CORNERS = {"low-pass": 1, "high-pass": 1, "band-pass": 2, "band-stop": 2}

T = TypeVar("T")
U = TypeVar("U")


def typed(filter: Filter, key: str, kind: type[T]) -> T:
    """A setting of the type that the model promises.

    Raises:
        SpecError: it is absent or of another type.
    """
    value = filter.settings.get(key)
    if not isinstance(value, kind) or isinstance(value, bool):
        raise SpecError(
            Problem(
                filter.place(key),
                f"no {key} in filter {filter.name}"
                if value is None
                else f"{key} of filter {filter.name} is {value!r}",
                f"method {filter.method} needs {key}",
                f"state {key}",
            )
        )
    return value


def together(one: Callable[[], T], other: Callable[[], U]) -> tuple[T, U]:
    """Both values, or the problems of both.

    Raises:
        SpecError: with every problem that either raised.
    """
    problems: list[Problem] = []
    first: list[T] = []
    second: list[U] = []
    try:
        first.append(one())
    except SpecError as error:
        problems += error.problems
    try:
        second.append(other())
    except SpecError as error:
        problems += error.problems
    if problems:
        raise SpecError(*problems)
    return first[0], second[0]


def frequency_setting(filter: Filter, key: str, rate_hz: Fraction) -> Fraction:
    """A frequency in Hz, strictly between 0 and half the rate.

    Raises:
        SpecError: it is not.
    """
    value = typed(filter, key, Fraction)
    _refuse_outside(filter, key, (value,), rate_hz)
    return value


def shape_setting(filter: Filter) -> str:
    """One of the four shapes.

    Raises:
        SpecError: another word.
    """
    shape = typed(filter, "shape", str)
    if shape not in CORNERS:
        raise SpecError(
            Problem(
                filter.place("shape"), f"shape {shape}", ", ".join(CORNERS), "state one of them"
            )
        )
    return shape


def corner_settings(filter: Filter, rate_hz: Fraction, shape: str) -> list[float]:
    """The corners in Hz: one, or two rising ones for a band shape.

    Raises:
        SpecError: the wrong count or order, or corners outside (0, rate/2).
    """
    corners = typed(filter, "corners", tuple)
    count = CORNERS[shape]
    if len(corners) != count:
        raise SpecError(
            Problem(
                filter.place("corners"),
                f"{len(corners)} corners for shape {shape}",
                f"{count} for this shape",
                "state [lower, upper]" if count == 2 else "state a single one",
            )
        )
    _refuse_outside(filter, "corners", corners, rate_hz)
    if count == 2 and not corners[0] < corners[1]:
        raise SpecError(
            Problem(
                filter.place("corners"),
                f"corners {float(corners[0]):.10g} Hz and {float(corners[1]):.10g} Hz",
                "a lower corner, then a higher one",
                "put them in rising order",
            )
        )
    return [float(corner) for corner in corners]


def _refuse_outside(
    filter: Filter, key: str, values: tuple[Fraction, ...], rate_hz: Fraction
) -> None:
    problems = [
        Problem(
            filter.place(key),
            f"{key}: {float(value):.10g} Hz at a sample rate of {float(rate_hz):.10g} Hz",
            f"above 0 and below half the rate, {float(rate_hz / 2):.10g} Hz",
            "state another frequency, or use data of a higher rate",
        )
        for value in values
        if not 0 < value < rate_hz / 2
    ]
    if problems:
        raise SpecError(*problems)


def whole_samples(filter: Filter, key: str, rate_hz: Fraction) -> int:
    """A length as a whole number of samples, from 1 to 2^20.

    Raises:
        SpecError: it is not; the nearest whole lengths are named.
    """
    amount = typed(filter, key, Amount)
    samples = amount.in_samples(rate_hz)
    if samples.denominator == 1 and 1 <= samples <= MOST_TAPS:
        return int(samples)
    near = sorted({min(max(n, 1), MOST_TAPS) for n in (floor(samples), ceil(samples))})
    found = f"{key}: {amount.text}"
    if amount.samples is None:
        found += f" is {float(samples):.10g} samples at {float(rate_hz):.10g} Hz"
    raise SpecError(
        Problem(
            filter.place(key),
            found,
            f"a whole number of samples, 1 to {MOST_TAPS}",
            "state " + " or ".join(f"{n} sample{'s' if n > 1 else ''}" for n in near),
        )
    )
