"""Missing samples: bridged, replaced by stand-ins before a transform, marked after it."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from pipeline_filters.kernels.slab import (
    Comparable,
    Marks,
    Samples,
    Slab,
    all_finite,
    empty_slab,
)

_FAR = np.int64(1) << 62


class Bridging(Comparable):
    """Turns rows with NaN into finite rows with marks, filling short runs.

    A run of up to ``bridge`` missing samples between two present ones is filled on the
    straight line between them and counts as present. Any other missing sample stays
    marked and gets a stand-in. With ``line`` = 0 the stand-in is 0. With ``line`` = L > 0
    it is the straight line between the neighbours where the run is at most L long; in a
    longer run the last L samples hold the right neighbour, the first L the left one, and
    what lies between is 0, so that a stand-in never depends on samples further than L
    away. A run that touches an end of the stretch has one neighbour and is never bridged.

    Samples of an undecided run are held back: at most ``bridge`` + 1 or ``line`` samples.
    """

    def __init__(self, rows: int, *, bridge: int = 0, line: int = 0) -> None:
        self.rows = rows
        self.bridge = bridge
        self.line = line
        self.held: Samples = np.zeros((rows, 0), np.float64)
        # Distance from the first held sample back to the last present one (1 = the sample
        # just before), and its value; _FAR where there is none in this stretch.
        self.since: NDArray[np.int64] = np.full(rows, _FAR)
        self.last: NDArray[np.float64] = np.zeros(rows)

    @property
    def look_back(self) -> int:
        """How many samples before a start in mid-stretch must be pushed and dropped."""
        return max(self.bridge + 1 if self.bridge else 0, self.line + 1 if self.line else 0)

    def push(self, rows: Samples) -> Slab:
        """Takes rows of shape (rows, n), NaN where missing; gives what is decided."""
        if not self.held.shape[1] and all_finite(rows):
            if rows.shape[1] and self.look_back:
                self.since[:] = 1
                self.last[:] = rows[:, -1]
            return Slab(rows, None)
        return self._decide(np.concatenate([self.held, rows], axis=1), final=False)

    def finish(self) -> Slab:
        """The stretch has ended: decides what was held back."""
        if not self.held.shape[1]:
            return empty_slab(self.rows, self.held.dtype)
        return self._decide(self.held, final=True)

    def _decide(self, rows: Samples, *, final: bool) -> Slab:
        count = rows.shape[1]
        missing: Marks = np.isnan(rows)
        if not self.look_back:
            return Slab(np.where(missing, rows.dtype.type(0), rows), _marks(missing))
        column = np.arange(count, dtype=np.int64)
        present = ~missing
        left = np.maximum.accumulate(np.where(present, column, -_FAR), axis=1)
        left = np.maximum(left, -self.since[:, None])
        right = np.where(present, column, _FAR)[:, ::-1]
        right = np.minimum.accumulate(right, axis=1)[:, ::-1]

        stop = count
        if not final:
            open_run = right >= _FAR
            run_so_far = count - np.maximum(left, -_FAR // 2) - 1
            undecided = (left > -_FAR // 2) & (run_so_far <= self.bridge)
            if self.line:
                undecided |= (count - column) <= self.line
            undecided &= open_run
            hit = undecided.any(axis=0)
            stop = int(hit.argmax()) if hit.any() else count
        filled, still = self._fill(rows, missing, left, right, stop)
        self._remember(rows, left, stop)
        self.held = np.array(rows[:, stop:])
        return Slab(filled, _marks(still))

    def _fill(
        self,
        rows: Samples,
        missing: Marks,
        left: NDArray[np.int64],
        right: NDArray[np.int64],
        stop: int,
    ) -> tuple[Samples, Marks]:
        filled = np.array(rows[:, :stop], np.float64 if missing.any() else rows.dtype)
        still = np.array(missing[:, :stop])
        for row in np.flatnonzero(still.any(axis=1)):
            at = np.flatnonzero(still[row])
            before, after = left[row, at], right[row, at]
            has_left, has_right = before > -_FAR // 2, after < _FAR
            run = np.where(has_left & has_right, after - before - 1, _FAR)
            x_left = np.where(before >= 0, rows[row, np.maximum(before, 0)], self.last[row])
            x_left = np.where(has_left, x_left, 0.0)
            x_right = np.where(has_right, rows[row, np.where(has_right, after, 0)], 0.0)
            share = (at - before) / np.maximum(run + 1, 1)
            on_line = x_left + (x_right - x_left) * share
            bridged = run <= self.bridge
            sided = np.where(has_left & (at - before <= self.line), x_left, 0.0)
            sided = np.where(has_right & (after - at <= self.line), x_right, sided)
            stand_in = np.where(run <= self.line, on_line, sided)
            filled[row, at] = np.where(bridged, on_line, stand_in)
            still[row, at] = ~bridged
        return filled, still

    def _remember(self, rows: Samples, left: NDArray[np.int64], stop: int) -> None:
        if stop == 0:
            return
        for row in range(self.rows):
            last = int(left[row, stop - 1])
            if last >= 0:
                self.last[row] = rows[row, last]
            self.since[row] = stop - last if last > -_FAR // 2 else _FAR


class Spread(Comparable):
    """Marks results whose support holds a missing input.

    The result at position m is missing exactly where an input in
    [m - back, m - ahead] is missing; positions are those of the input.
    """

    def __init__(self, start: int, emit_from: int, *, back: int, ahead: int) -> None:
        self.back = back
        self.ahead = ahead
        self.next_result = emit_from
        self.history_start = start
        self.parts: list[tuple[int, Marks | None]] = []

    def push(self, length: int, missing: Marks | None) -> None:
        """Takes the marks of the next ``length`` inputs."""
        if length:
            self.parts.append((length, missing))

    def take(self, rows: int, count: int) -> Marks | None:
        """The marks of the next ``count`` results, shape (rows, count); None where none."""
        first = self.next_result - self.back
        stop = self.next_result + count - self.ahead
        self.next_result += count
        marks = self._window(rows, first, stop)
        self._forget(self.next_result - self.back)
        if marks is None or not count:
            return None
        sums = np.zeros((rows, marks.shape[1] + 1), np.int32)
        np.cumsum(marks, axis=1, out=sums[:, 1:])
        width = self.back - self.ahead + 1
        return _marks(sums[:, width : width + count] > sums[:, :count])

    def _window(self, rows: int, first: int, stop: int) -> Marks | None:
        window: Marks | None = None
        at = self.history_start
        for length, missing in self.parts:
            low, high = max(at, first), min(at + length, stop)
            if missing is not None and low < high:
                if window is None:
                    window = np.zeros((rows, stop - first), np.bool_)
                window[:, low - first : high - first] = missing[:, low - at : high - at]
            at += length
        return window

    def _forget(self, before: int) -> None:
        while self.parts and self.history_start + self.parts[0][0] <= before:
            self.history_start += self.parts.pop(0)[0]


def _marks(missing: Marks) -> Marks | None:
    return missing if missing.any() else None


def mark_with_nan(slab: Slab, dtype: np.dtype[Any]) -> Samples:
    """The samples as ``dtype`` with NaN where they are missing; may share memory."""
    values = slab.values.astype(dtype, copy=slab.missing is not None)
    if slab.missing is not None:
        values[slab.missing] = np.nan
    return values
