"""The check of a time axis: streamed once, cut into stretches, refused where it is not even.

Most stamps are judged by the least and the largest raw difference of a run that fits the
processor's cache. Only a run that holds an irregular step is taken to nanoseconds and judged
step by step, in whole numbers.
"""

from __future__ import annotations

from fractions import Fraction
from math import ceil, floor
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from pipeline_filters.errors import Problem, SourceError
from pipeline_filters.source.axis import NS_PER_SECOND, Axis, clock_numbers
from pipeline_filters.source.cf_time import TimeUnitError, TimeUnits, numbers_of, stamp_text
from pipeline_filters.spec.model import Signal

# Mean rates are judged over stretches of at least this many samples.
MEAN_FROM_SAMPLES = 1000
# Steps judged together. A window in which more than half of the steps are irregular is of
# another rate, not an axis with breaks. Counted from sample 0, so that chunks do not matter.
WINDOW_SAMPLES = 1 << 16
# Stamps read in one go, at least: two megabytes.
READ_SAMPLES = 1 << 18
_SHOWN = 5

Stamps = NDArray[np.int64]


class StampReader(Protocol):
    """Where a signal's stamps come from."""

    @property
    def name(self) -> str:
        """The coordinate's name."""

    @property
    def units(self) -> TimeUnits:
        """How raw stamps become nanoseconds."""

    @property
    def chunk_samples(self) -> int:
        """Stamps that are decoded together."""

    def read(self, start: int, stop: int) -> NDArray[Any]:
        """Raw stamps of samples [start, stop)."""

    def resolution_ns(self, step_ns: Fraction) -> Fraction:
        """How coarse the stamps are, beside a step of ``step_ns``."""


def scan_axis(stamps: StampReader, length: int, signal: Signal) -> Axis:
    """Checks a time axis, a few megabytes (or one chunk) of stamps at a time.

    A step is regular within 0.1 sample plus the stamps' resolution, judged step by step.
    Over a stretch of 1,000 samples or more the mean rate must agree with the stated one
    within the signal's ``rate_tolerance``. A repeated stamp is a break like a jump.

    Args:
        stamps: the time coordinate.
        length: samples, at least 1.

    Raises:
        SourceError: a missing stamp; a backward step; an irregular one where the spec says
            ``breaks: refuse``; a rate that disagrees; stamps too coarse for the rate.
    """
    scan = _Scan(stamps, signal)
    scan.run(length)
    return scan.axis(length)


class _Scan:
    """What a scan has come upon so far."""

    def __init__(self, stamps: StampReader, signal: Signal) -> None:
        self.stamps = stamps
        self.signal = signal
        self.step_ns = Fraction(NS_PER_SECOND) / signal.rate_hz
        self.resolution_ns = stamps.resolution_ns(self.step_ns)
        self.where = f"{signal.variable}, coordinate {stamps.name}"
        if self.resolution_ns >= self.step_ns * 9 / 10:
            raise self._too_coarse(f"stamps are only {_seconds(self.resolution_ns)} fine")
        slack = self.step_ns / 10 + self.resolution_ns
        self.low, self.high = ceil(self.step_ns - slack), floor(self.step_ns + slack)
        self.raw_low, self.raw_high = self._raw_bounds()
        self.breaks: list[tuple[Stamps, Stamps, Stamps]] = []  # indexes, stamps, stamps before
        self.shown: list[Problem] = []
        self.irregular = 0
        self.backward = False
        self.in_window: list[Stamps] = []
        self.first_ns = self.last_ns = 0

    def run(self, length: int) -> None:
        unit = self.stamps.chunk_samples
        size = unit * max(1, READ_SAMPLES // unit)
        before: NDArray[Any] | None = None
        for start in range(0, length, size):
            raw = numbers_of(self.stamps.read(start, min(start + size, length)))
            if raw.dtype.itemsize < 8:
                raw = raw.astype(np.float64 if raw.dtype.kind == "f" else np.int64)
            if before is None:
                self.first_ns = int(self._to_ns(raw[:1], 0)[0])
                low = 1
            else:
                self._judge(np.concatenate([before, raw[:1]]), start)
                self._end_window(start + 1, length)
                low = 1
            while low < raw.size:
                # Up to the end of a window: the steps that lead to its samples.
                index = start + low
                high = min(raw.size, low + WINDOW_SAMPLES - index % WINDOW_SAMPLES)
                self._judge(raw[low - 1 : high], index)
                self._end_window(start + high, length)
                low = high
            before = raw[-1:].copy()
            self.last_ns = self.stamps.units.one_to_ns(raw[-1].item())

    def _raw_bounds(self) -> tuple[float, float]:
        """Raw differences that are regular beyond doubt.

        Two nanoseconds and a few roundings inside what is allowed, as floats are rounded to
        whole nanoseconds before they are judged.
        """
        unit = self.stamps.units.unit_ns
        low, high = Fraction(self.low + 2, unit), Fraction(self.high - 2, unit)
        edge = Fraction(1, 2**50)
        return float(low * (1 + edge)), float(high * (1 - edge))

    def _judge(self, raw: NDArray[Any], index: int) -> None:
        """Judges the steps of a run of stamps, the second of which is sample ``index``."""
        with np.errstate(all="ignore"):
            steps = raw[1:] - raw[:-1]
        # Missing stamps make the comparison false.
        if self.raw_low <= steps.min() and steps.max() <= self.raw_high and self._plain(raw):
            return
        stamps_ns = self._to_ns(raw, index - 1)
        steps_ns = np.diff(stamps_ns)
        back = stamps_ns[1:] < stamps_ns[:-1]
        irregular = (steps_ns < self.low) | (steps_ns > self.high) | back
        at = np.flatnonzero(irregular)
        if at.size:
            self._note(at, steps_ns, back, stamps_ns, index)

    def _plain(self, raw: NDArray[Any]) -> bool:
        """Whether stamps whose steps look regular can be taken so.

        That is, none passes the range of 64 bits and none is a marker of a missing one.
        """
        first, last = raw[0].item(), raw[-1].item()
        units = self.stamps.units
        if any(first <= marker <= last for marker in units.markers):
            return False
        limit = 2**63 - 1
        return bool(
            first < last and -limit < units.one_to_ns(first) and units.one_to_ns(last) < limit
        )

    def _to_ns(self, raw: NDArray[Any], index: int) -> Stamps:
        try:
            return self.stamps.units.to_ns(raw)
        except TimeUnitError as error:
            at = "" if error.at is None else f", sample {index + error.at}"
            raise SourceError(
                Problem(f"{self.where}{at}", error.found, error.allowed, error.remedy)
            ) from None

    def _note(
        self,
        at: NDArray[np.intp],
        steps_ns: Stamps,
        back: NDArray[np.bool_],
        stamps_ns: Stamps,
        index: int,
    ) -> None:
        """Notes irregular steps; step i leads from stamp i to sample index + i."""
        self.irregular += int(at.size)
        self.in_window.append(steps_ns[at])
        splits = self.signal.breaks == "split"
        if splits:
            self.breaks.append((at + np.int64(index), stamps_ns[at + 1], stamps_ns[at]))
        refused = at[back[at]] if splits else at
        shown = refused[: max(0, _SHOWN - len(self.shown))].tolist()
        if back.any() and not self.backward:
            self.backward = True
            shown = sorted({*shown, int(back.argmax())})
        for which in shown:
            self._show(which, stamps_ns, index)

    def _show(self, which: int, stamps_ns: Stamps, index: int) -> None:
        stamp, before = int(stamps_ns[which + 1]), int(stamps_ns[which])
        step = stamp - before
        if step < 0:
            word, remedy = "time goes back", "sort the source by time, and mend the stamp"
        else:
            word = "the stamp repeats" if step == 0 else "the axis jumps"
            remedy = "state breaks: split, or mend the axis"
        kind = self.stamps.units.kind
        self.shown.append(
            Problem(
                f"{self.where}, sample {index + which}, {stamp_text(stamp, kind)}",
                f"{word}: the step is {_seconds(step)}",
                f"steps of {_seconds(self.step_ns)} within a tenth",
                remedy,
            )
        )

    def _end_window(self, reached: int, length: int) -> None:
        """Judges a window of steps at its end: is it of another rate?"""
        if reached % WINDOW_SAMPLES and reached < length:
            return
        irregular, self.in_window = self.in_window, []
        begin = (reached - 1) // WINDOW_SAMPLES * WINDOW_SAMPLES
        steps = reached - max(begin, 1)
        count = sum(part.size for part in irregular)
        # A few steps after the last full window tell no rate; in a short source they must.
        if steps < 2 or 2 * count <= steps or (begin and steps < MEAN_FROM_SAMPLES):
            return
        raise self._another_rate(np.sort(np.concatenate(irregular)), steps, begin)

    def _another_rate(self, steps_ns: Stamps, steps: int, begin: int) -> SourceError:
        """The refusal of a window; ``steps_ns`` are its irregular steps, sorted."""
        where = f"{self.where}, samples {begin} to {begin + steps}"
        usual = int(steps_ns[(steps_ns.size - 1) // 2])
        alike = np.count_nonzero(np.abs(steps_ns - usual) <= abs(usual) // 10)
        if usual == 0:
            return self._too_coarse(f"most stamps repeat the one before ({alike} of {steps})")
        if usual < 0 or 2 * alike < steps_ns.size:
            return SourceError(
                Problem(
                    where,
                    f"{steps_ns.size} of {steps} steps are irregular, from "
                    f"{_seconds(int(steps_ns[0]))} to {_seconds(int(steps_ns[-1]))}",
                    f"steps of {_seconds(self.step_ns)} within a tenth",
                    "sort the source by time" if usual < 0 else "put the source on an even axis",
                )
            )
        return SourceError(
            Problem(
                where,
                f"the usual step is {_seconds(usual)} ({NS_PER_SECOND / usual:.9g} Hz)",
                f"the spec states {self.signal.rate_text} ({_seconds(self.step_ns)} a sample)",
                "state the source's rate in the spec, or name the right source",
            )
        )

    def _too_coarse(self, found: str) -> SourceError:
        return SourceError(
            Problem(
                self.where,
                f"{found}, but a sample lasts {_seconds(self.step_ns)}",
                "stamps finer than a sample",
                "store finer stamps, or remove the time coordinate so that samples are counted",
            )
        )

    def axis(self, length: int) -> Axis:
        """The axis of what was found, or its refusal."""
        if self.backward or (self.irregular and self.signal.breaks == "refuse"):
            more = self.irregular - len(self.shown)
            rest = [Problem(self.where, f"{more} more irregular steps")] if more else []
            raise SourceError(*self.shown, *rest)
        none = (np.zeros(0, np.int64),) * 3
        columns = zip(none, *self.breaks, strict=True)
        at, reached, before = (np.concatenate(column) for column in columns)
        starts = np.concatenate([np.zeros(1, np.int64), at])
        firsts = np.concatenate([np.array([self.first_ns], np.int64), reached])
        lasts = np.concatenate([before, np.array([self.last_ns], np.int64)])
        lengths = np.diff(starts, append=np.int64(length))
        drift_ppm = self._drift_ppm(lengths, firsts, lasts)
        rate_hz = self.signal.rate_hz
        return Axis(
            self.stamps.units.kind,
            rate_hz,
            starts,
            lengths,
            firsts,
            clock_numbers(firsts, rate_hz),
            drift_ppm,
            length,
        )

    def _drift_ppm(self, lengths: Stamps, firsts: Stamps, lasts: Stamps) -> float:
        """The worst mean rate of the long stretches, beside the stated one."""
        long = lengths >= MEAN_FROM_SAMPLES
        if not long.any():
            return 0.0
        wanted = (lengths[long] - 1) * float(self.step_ns)
        off = np.abs((lasts - firsts)[long] / wanted - 1)
        allowed = float(self.signal.rate_tolerance) + 2 * float(self.resolution_ns) / wanted
        wrong = np.flatnonzero(off > allowed)
        problems = []
        for which in wrong[:_SHOWN]:
            first, last = int(firsts[long][which]), int(lasts[long][which])
            count = int(lengths[long][which])
            mean = Fraction((count - 1) * NS_PER_SECOND, last - first)
            problems.append(
                Problem(
                    f"{self.where}, {count} samples from "
                    f"{stamp_text(first, self.stamps.units.kind)}",
                    f"the mean rate is {float(mean):.9g} Hz, "
                    f"{float(mean / self.signal.rate_hz - 1) * 1e6:+.1f} ppm off the stated "
                    f"{self.signal.rate_text}",
                    f"at most {float(self.signal.rate_tolerance) * 1e6:g} ppm",
                    "state the true rate, or a wider rate_tolerance",
                )
            )
        if wrong.size > _SHOWN:
            problems.append(Problem(self.where, f"{wrong.size - _SHOWN} more such stretches"))
        if problems:
            raise SourceError(*problems)
        return float(off.max()) * 1e6


def _seconds(ns: int | Fraction) -> str:
    return f"{float(Fraction(ns) / NS_PER_SECOND):.9g} s"
