"""Recursive filters as second-order sections, from rest, with a carry.

A recursion cannot bound its support: it runs on from its start, and starts anew after a
missing sample. Every start is warmed up over ``rest`` samples of its own input, extended
by the ends rule. It always works in float64.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from pipeline_filters.kernels.ends import Rule, extend, needed_samples
from pipeline_filters.kernels.slab import (
    Comparable,
    Marks,
    Samples,
    Slab,
    cut_slab,
    empty_slab,
    join_slabs,
)

# States this small are set to zero where the clock passes a multiple of CALM_GRID: a
# channel gone dead would otherwise end in denormal numbers, which are many times slower.
# On a grid fixed by the clock, the bits do not depend on how the input was cut.
CALM_BELOW = 1e-200
CALM_GRID = 16_384


class Recursion(Comparable):
    """Second-order sections applied to rows, from rest, restarted after missing runs.

    Args:
        sections: shape (S, 6): b0 b1 b2 a0 a1 a2 with a0 = 1.
        rest: R, samples of extension before a start, after which rest is reached.
        settle: results marked missing after a restart (and after a blank start).
        rule: the ends rule.
        start: clock number of the first sample.
    """

    def __init__(
        self,
        rows: int,
        sections: NDArray[np.float64],
        *,
        rest: int,
        settle: int,
        rule: Rule,
        start: int,
    ) -> None:
        self.sections = sections
        self.rest = rest
        self.settle = settle
        self.rule: Rule = rule
        self.position = start
        self.state = np.zeros((sections.shape[0], rows, 2))
        self.running = np.zeros(rows, np.bool_)
        self.unsettled = np.zeros(rows, np.int64)
        self.fresh = np.full(rows, rule != "blank")  # a start that needs no settling
        self.pending = empty_slab(rows, np.dtype(np.float64))

    def push(self, slab: Slab) -> Slab:
        """Takes the next samples; gives results as far as every row's start is known."""
        return self._advance(join_slabs([self.pending, slab]), final=False)

    def finish(self) -> Slab:
        """The stretch has ended: the results that waited for a start."""
        return self._advance(self.pending, final=True)

    def _advance(self, slab: Slab, *, final: bool) -> Slab:
        rows, count = slab.values.shape
        plain = np.flatnonzero(self._plain(slab.missing))
        others = np.setdiff1d(np.arange(rows), plain)
        segments = {int(row): _present_runs(slab.missing, int(row), count) for row in others}
        stop = count
        if not final:
            for row, runs in segments.items():
                stop = min(stop, self._known_until(row, runs, count))
        values = np.zeros((rows, stop))
        missing = np.zeros((rows, stop), np.bool_)
        if plain.size == rows and stop:
            values = self._run(slice(None), slab.values[:, :stop])
        elif plain.size and stop:
            values[plain] = self._run(plain, slab.values[plain, :stop])
        for row, runs in segments.items():
            self._run_row(row, runs, slab, values[row], missing[row])
        self.position += stop
        rest = cut_slab(slab, stop, count)
        self.pending = Slab(np.array(rest.values), rest.missing)
        return cut_slab(Slab(values, missing), 0, stop) if segments else Slab(values, None)

    def _plain(self, missing: Marks | None) -> NDArray[np.bool_]:
        """Rows that just run on: started, settled and without a missing sample."""
        plain: NDArray[np.bool_] = self.running & (self.unsettled == 0)
        if missing is not None:
            plain &= ~missing.any(axis=1)
        return plain

    def _known_until(self, row: int, runs: list[tuple[int, int]], count: int) -> int:
        """Where a start at the end of what is known still lacks samples to extend."""
        if runs and runs[-1][1] == count:
            begin = runs[-1][0]
            if begin == 0 and self.running[row]:
                return count
            if count - begin < max(1, needed_samples(self.rule, self.rest)):
                return begin
        return count

    def _run_row(
        self,
        row: int,
        runs: list[tuple[int, int]],
        slab: Slab,
        values: NDArray[np.float64],
        missing: Marks,
    ) -> None:
        stop = values.size
        last = 0
        for begin, end in [*runs, (stop, stop)]:
            begin, cut = min(begin, stop), min(end, stop)
            if begin > last or (begin == cut and last < stop):
                missing[last:begin] = True
                self.running[row] = self.fresh[row] = False
                self.unsettled[row] = 0
            if begin == cut:
                break
            if not self.running[row]:
                self._start(row, cut_slab(slab, begin, end).values[row : row + 1])
            piece = slab.values[row : row + 1, begin:cut]
            values[begin:cut] = self._run(slice(row, row + 1), piece, at=begin)[0]
            settling = min(int(self.unsettled[row]), cut - begin)
            missing[begin : begin + settling] = True
            values[begin : begin + settling] = 0
            self.unsettled[row] -= settling
            last = cut

    def _start(self, row: int, present: Samples) -> None:
        """From rest, over the extension of the samples that follow."""
        state = np.zeros((self.sections.shape[0], 1, 2))
        if self.rest and self.rule not in ("zero", "blank"):
            known = Slab(present[:, : self.rest + 1].astype(np.float64))
            before = extend(known, self.rule, self.rest, side="left").values
            _, state = _sosfilt(self.sections, before, state)
        self.state[:, row : row + 1] = state
        self.running[row] = True
        self.unsettled[row] = 0 if self.fresh[row] else self.settle
        self.fresh[row] = False

    def _run(
        self, rows: slice | NDArray[np.intp], samples: Samples, at: int = 0
    ) -> NDArray[np.float64]:
        """The sections over samples of shape (rows, n), calmed on the clock's grid."""
        count = samples.shape[1]
        out = np.empty(samples.shape)
        state = self.state[:, rows]
        done = 0
        while done < count:
            number = self.position + at + done
            size = min(count - done, CALM_GRID - number % CALM_GRID)
            piece = np.ascontiguousarray(samples[:, done : done + size], np.float64)
            out[:, done : done + size], state = _sosfilt(self.sections, piece, state)
            done += size
            if (number + size) % CALM_GRID == 0:
                state[np.abs(state) < CALM_BELOW] = 0
        self.state[:, rows] = state
        return out


def _sosfilt(
    sections: NDArray[np.float64], samples: Samples, state: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    # Half a second to load, which chains of taps alone never need.
    from scipy.signal import sosfilt

    out, after = sosfilt(sections, samples, axis=-1, zi=state)
    return out, after


def _present_runs(missing: Marks | None, row: int, count: int) -> list[tuple[int, int]]:
    """The runs [begin, end) of present samples in one row."""
    if missing is None:
        return [(0, count)] if count else []
    edges = np.flatnonzero(np.diff(missing[row], prepend=True, append=True))
    return [(int(begin), int(end)) for begin, end in edges.reshape(-1, 2)]
