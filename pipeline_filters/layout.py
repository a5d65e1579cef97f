"""Integers only: stretches, blocks, reach, storage units and spans.

Positions are of three kinds, and every name says which: an *index* counts samples of the
source from 0; an *offset* counts samples of one stretch from 0; a *number* counts samples
by the clock, so that blocks lie where they lie wherever a run starts.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from itertools import pairwise
from itertools import product as all_pairs
from math import ceil, prod
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True)
class Stretch:
    """An unbroken run of evenly spaced samples.

    Attributes:
        start: index of its first sample.
        length: samples in it.
        number: clock number of its first sample.
    """

    start: int
    length: int
    number: int

    @property
    def stop(self) -> int:
        """Index after its last sample."""
        return self.start + self.length


@dataclass(frozen=True, eq=False)
class Stretches:
    """All stretches of a time axis, in order; arrays, since a broken axis has many.

    Attributes:
        starts, lengths, numbers: shape (stretches,), int64, as in `Stretch`.
    """

    starts: NDArray[np.int64]
    lengths: NDArray[np.int64]
    numbers: NDArray[np.int64]

    def within(self, start: int, stop: int) -> Iterator[tuple[Stretch, int, int]]:
        """The stretches that hold samples of [start, stop), with those samples' offsets."""
        first = int(np.searchsorted(self.starts, start, side="right")) - 1
        for index in range(max(0, first), self.starts.size):
            stretch = Stretch(
                int(self.starts[index]), int(self.lengths[index]), int(self.numbers[index])
            )
            if stretch.start >= stop:
                return
            low, high = max(start, stretch.start), min(stop, stretch.stop)
            if low < high:
                yield stretch, low - stretch.start, high - stretch.start

    def part(self, start: int, stop: int) -> Stretches:
        """Those that hold samples of [start, stop), whole."""
        first = max(0, int(np.searchsorted(self.starts, start, side="right")) - 1)
        last = int(np.searchsorted(self.starts, stop, side="left"))
        return Stretches(
            self.starts[first:last], self.lengths[first:last], self.numbers[first:last]
        )


@dataclass(frozen=True)
class TapsReach:
    """What the results of one run of taps reach for.

    Attributes:
        hop: B, samples in a block; blocks start at multiples of it in clock numbering.
        taps: P.
        lead: samples a result looks ahead: y[n] = sum of taps[k] * x[n + lead - k].
        look_back, look_ahead: samples that the filling of missing ones looks at besides.
    """

    hop: int
    taps: int
    lead: int
    look_back: int = 0
    look_ahead: int = 0

    @property
    def before(self) -> int:
        """Samples before a result among which its value is formed."""
        return self.taps - 1 - self.lead

    def first_offset(self, stretch: Stretch, start: int, stop: int) -> int:
        """From which offset to read for the results at offsets [start, stop).

        Every block with a term in them must be read whole. Where they reach past the
        stretch's end, the samples that its extension mirrors are read as well. 0 stands
        for the stretch's start, with what extends it.
        """
        block = (stretch.number + start - self.before) // self.hop * self.hop
        offset = block - stretch.number
        if stop - 1 + self.lead >= stretch.length:
            offset = min(offset, stretch.length - 1 - self.lead)
        return max(0, offset - self.look_back)

    def last_offset(self, stretch: Stretch, stop: int) -> int:
        """Up to which offset (exclusive) to read until results before ``stop`` are published.

        At a stretch's start, its reflection may ask for ``before`` + 1 samples first.
        """
        final = stretch.number + stop - 1 + self.lead
        block_stop = (final // self.hop + 1) * self.hop
        wanted = max(block_stop - stretch.number, self.before + 1)
        return min(stretch.length, wanted + self.look_ahead)

    @property
    def block_reach(self) -> tuple[int, int]:
        """The furthest samples before and after a result on which its bits can depend."""
        before = self.before + self.hop - 1 + self.look_back
        return before, self.lead + self.hop - 1 + self.look_ahead

    @property
    def hold_back(self) -> int:
        """How many samples after a result's own must have come before it is published."""
        return self.block_reach[1]


Box = tuple[slice, ...]


@dataclass(frozen=True)
class UnitGrid:
    """The storage units of a result: chunks, or shards where the store is sharded.

    Attributes:
        shape: the result's shape, in its dimension order.
        unit: a unit's shape.
        time_dim: which dimension is time.
    """

    shape: tuple[int, ...]
    unit: tuple[int, ...]
    time_dim: int

    @property
    def counts(self) -> tuple[int, ...]:
        """Units along each dimension."""
        return tuple(ceil(n / u) for n, u in zip(self.shape, self.unit, strict=True))

    @property
    def time_unit(self) -> int:
        """Samples of a unit along time."""
        return self.unit[self.time_dim]

    @property
    def length(self) -> int:
        """Samples along time."""
        return self.shape[self.time_dim]

    def boxes(self, at_least: Sequence[int]) -> list[Box]:
        """Groups of channels made of whole units, one slice per channel dimension.

        Along each channel dimension a group is the smallest multiple of the unit that
        reaches ``at_least`` (the source's own chunk), so that a source chunk is not
        decoded once for every narrower unit.
        """
        ranges = []
        for n, u, least in zip(
            without(self.shape, self.time_dim),
            without(self.unit, self.time_dim),
            at_least,
            strict=True,
        ):
            width = u * max(1, ceil(least / u))
            ranges.append([slice(low, min(low + width, n)) for low in range(0, n, width)])
        return [tuple(box) for box in all_pairs(*ranges)]

    def units_in(self, box: Box, time_unit: int) -> Iterator[tuple[tuple[int, ...], Box]]:
        """The units of one run of time in a box: their place in the grid and channel slices."""
        units = without(self.unit, self.time_dim)
        ranges = [
            [
                (low // u, slice(low, min(low + u, part.stop)))
                for low in range(part.start, part.stop, u)
            ]
            for part, u in zip(box, units, strict=True)
        ]
        for combination in all_pairs(*ranges):
            place = [index for index, _ in combination]
            place.insert(self.time_dim, time_unit)
            yield tuple(place), tuple(part for _, part in combination)


@dataclass(frozen=True)
class Span:
    """The unit of work: a run of storage units along time, times a group of channels."""

    first_unit: int
    stop_unit: int
    box: Box

    def indexes(self, grid: UnitGrid) -> tuple[int, int]:
        """The samples [start, stop) along time."""
        return (
            self.first_unit * grid.time_unit,
            min(self.stop_unit * grid.time_unit, grid.length),
        )


T = TypeVar("T")


def without(values: Sequence[T], dim: int) -> tuple[T, ...]:
    """The values of all dimensions but one."""
    return tuple(value for index, value in enumerate(values) if index != dim)


def box_rows(box: Box) -> int:
    """Channels in a box."""
    return prod(part.stop - part.start for part in box)


def plan_spans(
    grid: UnitGrid,
    boxes: Sequence[Box],
    *,
    span_samples: int,
    reach_samples: int,
    least_samples: int = 1,
) -> list[Span]:
    """Cuts every box into spans of about ``span_samples`` values.

    A span of a chain that is warmed up over its reach is also at least 16 reaches long, so
    that warming up stays a small share of the work; and at least ``least_samples`` along time.
    What is left over is shared out, so that no sliver remains.
    """
    spans = []
    total = grid.counts[grid.time_dim]
    for box in boxes:
        samples = max(span_samples // max(1, box_rows(box)), 16 * reach_samples, least_samples)
        units = max(1, ceil(samples / grid.time_unit))
        pieces = max(1, total // units)
        edges = [round(index * total / pieces) for index in range(pieces + 1)]
        spans += [Span(low, high, box) for low, high in pairwise(edges)]
    return spans


def decodings(
    edges: Sequence[tuple[int, int]], chunk_samples: int, length: int
) -> tuple[float, int]:
    """How often each source chunk along time is decoded by reads of ``edges``, and at most."""
    counts: dict[int, int] = {}
    for start, stop in edges:
        for chunk in range(start // chunk_samples, ceil(stop / chunk_samples)):
            counts[chunk] = counts.get(chunk, 0) + 1
    chunks = max(1, ceil(length / chunk_samples))
    return sum(counts.values()) / chunks, max(counts.values(), default=0)
