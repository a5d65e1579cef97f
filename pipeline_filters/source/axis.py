"""The time axis: streamed once, cut into stretches, refused where it is not even."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from fractions import Fraction
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from pipeline_filters.errors import Problem, SourceError
from pipeline_filters.source.cf_time import stamp_text
from pipeline_filters.spec.model import Signal

# Mean rates are judged over stretches of at least this many samples.
MEAN_FROM_SAMPLES = 1000
_SHOWN = 5


@dataclass(frozen=True, eq=False)
class Axis:
    """A checked time axis.

    Attributes:
        kind: stamped (CF datetimes), elapsed (numbers with a unit) or counted (no coordinate).
        rate_hz: samples per second, as the spec states it.
        starts, lengths: index of each stretch's first sample, and its samples; int64.
        first_ns: stamp of each stretch's first sample, int64 ns; 0 where counted.
        numbers: clock number of each stretch's first sample.
        drift_ppm: the largest deviation of a long stretch's mean rate from the stated one.
        length: all samples.
    """

    kind: Literal["stamped", "elapsed", "counted"]
    rate_hz: Fraction
    starts: NDArray[np.int64]
    lengths: NDArray[np.int64]
    first_ns: NDArray[np.int64]
    numbers: NDArray[np.int64]
    drift_ppm: float
    length: int

    def stamps_at(self, start: int, stop: int, half_samples: int) -> NDArray[np.int64]:
        """Stamps of samples [start, stop) plus half_samples / 2 of a step, int64 ns.

        Computed in integers from each stretch's first stamp, rounded half to even.
        """
        out = np.empty(stop - start, np.int64)
        first = int(np.searchsorted(self.starts, start, side="right")) - 1
        while start < stop:
            begin, length = int(self.starts[first]), int(self.lengths[first])
            until = min(stop, begin + length)
            offsets = [2 * (n - begin) + half_samples for n in range(start, until)]
            half_step = Fraction(10**9) / self.rate_hz / 2
            top, bottom = half_step.numerator, half_step.denominator
            base = int(self.first_ns[first])
            out[out.size - (stop - start) : out.size - (stop - until)] = [
                base + _divided(n * top, bottom) for n in offsets
            ]
            start, first = until, first + 1
        return out


def _divided(top: int, bottom: int) -> int:
    """top / bottom, rounded half to even."""
    whole, rest = divmod(top, bottom)
    return whole + (2 * rest > bottom or (2 * rest == bottom and whole % 2 == 1))


def clock_number(stamp_ns: int, rate_hz: Fraction) -> int:
    """The number of a sample by the clock: (stamp - epoch) * rate, rounded half to even."""
    return _divided(stamp_ns * rate_hz.numerator, 10**9 * rate_hz.denominator)


def counted_axis(length: int, signal: Signal) -> Axis:
    """The axis of a source without stamps: one stretch, counted from 0."""
    zero = np.zeros(1, np.int64)
    whole = np.array([length], np.int64)
    return Axis("counted", signal.rate_hz, zero, whole, zero, zero, 0.0, length)


@dataclass
class _Found:
    """What a scan has come upon."""

    breaks: list[NDArray[np.int64]]
    stamps: list[NDArray[np.int64]]
    shown: list[Problem]
    irregular: int = 0


def scan_axis(
    stamps_ns: Callable[[int, int], NDArray[np.int64]],
    length: int,
    signal: Signal,
    *,
    kind: Literal["stamped", "elapsed"],
    resolution_ns: float,
    chunk_samples: int,
) -> Axis:
    """Checks a time axis chunk by chunk; never holds more than one chunk of stamps.

    A step is regular within 0.1 sample plus the stamps' resolution, judged step by step.
    Over a stretch of 1,000 samples or more the mean rate must agree with the stated one
    within the signal's ``rate_tolerance``. A repeated stamp is a break like a jump.

    Raises:
        SourceError: a backward step; an irregular one where the spec says ``breaks:
            refuse``; a rate that disagrees; stamps too coarse for the rate.
    """
    step_ns = float(Fraction(10**9) / signal.rate_hz)
    where = f"{signal.variable}, dimension {signal.time}"
    if resolution_ns >= 0.9 * step_ns:
        raise SourceError(
            Problem(
                where,
                f"stamps are only {resolution_ns:g} ns fine, but a sample lasts {step_ns:g} ns",
                "stamps finer than a sample",
                "store finer stamps, or remove the time coordinate so that samples are counted",
            )
        )
    tolerance_ns = 0.1 * step_ns + resolution_ns
    found = _Found([], [], [])
    last: int | None = None
    first_ns = last_ns = 0
    for start, stamps in _chunks(stamps_ns, length, chunk_samples):
        if last is None:
            first_ns = int(stamps[0])
            _refuse_other_rate(stamps, signal, where, tolerance_ns, step_ns)
            steps, origin = np.diff(stamps), start
        else:
            steps, origin = np.diff(stamps, prepend=np.int64(last)), start - 1
        off = np.abs(steps - step_ns) > tolerance_ns
        if off.any():
            _note(found, np.flatnonzero(off), steps, stamps, origin, start, signal, kind)
        last = last_ns = int(stamps[-1])
    if found.irregular and (
        signal.breaks == "refuse" or any(p.found.startswith("goes back") for p in found.shown)
    ):
        _refuse_breaks(found, signal)
    starts = np.concatenate([np.zeros(1, np.int64), *found.breaks])
    firsts = np.concatenate([np.array([first_ns], np.int64), *found.stamps])
    lengths = np.diff(starts, append=np.int64(length))
    drift = _check_mean(starts, lengths, firsts, last_ns, signal, stamps_ns, resolution_ns, kind)
    numbers = np.array([clock_number(int(ns), signal.rate_hz) for ns in firsts], np.int64)
    return Axis(kind, signal.rate_hz, starts, lengths, firsts, numbers, drift, length)


def _chunks(
    stamps_ns: Callable[[int, int], NDArray[np.int64]], length: int, chunk_samples: int
) -> Iterator[tuple[int, NDArray[np.int64]]]:
    for start in range(0, length, chunk_samples):
        yield start, stamps_ns(start, min(start + chunk_samples, length))


def _refuse_other_rate(
    stamps: NDArray[np.int64], signal: Signal, where: str, tolerance_ns: float, step_ns: float
) -> None:
    if stamps.size < 3:
        return
    usual = float(np.median(np.diff(stamps)))
    if usual > 0 and abs(usual - step_ns) > tolerance_ns:
        raise SourceError(
            Problem(
                where,
                f"the source's usual step is {usual / 1e9:.9g} s ({1e9 / usual:.9g} Hz)",
                f"the spec states {signal.rate_text} ({step_ns / 1e9:.9g} s a sample)",
                "state the source's rate in the spec, or name the right source",
            )
        )


def _note(
    found: _Found,
    at: NDArray[np.intp],
    steps: NDArray[np.int64],
    stamps: NDArray[np.int64],
    origin: int,
    start: int,
    signal: Signal,
    kind: str,
) -> None:
    """Notes irregular steps; ``at`` counts steps, step i leads to sample origin + i + 1."""
    indexes = at.astype(np.int64) + origin + 1
    reached = stamps[indexes - start]
    found.irregular += int(indexes.size)
    found.breaks.append(indexes)
    found.stamps.append(reached)
    backward = steps[at] < 0
    wanted = np.flatnonzero(backward)[:1] if backward.any() else np.arange(at.size)
    for which in wanted[: max(0, _SHOWN - len(found.shown)) or int(backward.any())]:
        step = int(steps[at[which]])
        word = "goes back" if step < 0 else ("repeats a stamp" if step == 0 else "jumps")
        found.shown.append(
            Problem(
                f"{signal.variable}, sample {int(indexes[which])}, "
                f"{stamp_text(int(reached[which]), kind)}",
                f"{word}: the step is {step / 1e9:.9g} s",
                f"steps of {float(1 / signal.rate_hz):.9g} s within a tenth",
                "sort the source by time" if step < 0 else "state breaks: split, or mend the axis",
            )
        )


def _refuse_breaks(found: _Found, signal: Signal) -> None:
    more = found.irregular - len(found.shown)
    problems = list(found.shown)
    if more > 0:
        problems.append(
            Problem(f"{signal.variable}, dimension {signal.time}", f"{more} more irregular steps")
        )
    raise SourceError(*problems)


def _check_mean(
    starts: NDArray[np.int64],
    lengths: NDArray[np.int64],
    firsts: NDArray[np.int64],
    last_ns: int,
    signal: Signal,
    stamps_ns: Callable[[int, int], NDArray[np.int64]],
    resolution_ns: float,
    kind: str,
) -> float:
    step_ns = Fraction(10**9) / signal.rate_hz
    drift = 0.0
    for index in np.flatnonzero(lengths >= MEAN_FROM_SAMPLES):
        end = int(starts[index] + lengths[index])
        final = last_ns if index == starts.size - 1 else int(stamps_ns(end - 1, end)[0])
        steps = int(lengths[index]) - 1
        off = float((final - int(firsts[index])) / (steps * step_ns) - 1)
        drift = max(drift, abs(off))
        slack = 2 * resolution_ns / (steps * float(step_ns))
        if abs(off) > float(signal.rate_tolerance) + slack:
            raise SourceError(
                Problem(
                    f"{signal.variable}, stretch from {stamp_text(int(firsts[index]), kind)}",
                    f"the mean rate is {off * 1e6:+.1f} ppm off the stated {signal.rate_text}",
                    f"at most {float(signal.rate_tolerance) * 1e6:g} ppm",
                    "state the true rate, or a wider rate_tolerance",
                )
            )
    return drift * 1e6
