"""One span's work: read slabs, push them through a stream, write whole units.

Nothing here knows Dask: a span is run by whoever calls `run_span`, in any process.
"""

from __future__ import annotations

import resource
import sys
import time
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, field
from functools import partial
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from pipeline_filters.chain.model import Chain
from pipeline_filters.errors import FilterStageError, Problem, SourceError
from pipeline_filters.kernels.overlap_add import copy_rows
from pipeline_filters.kernels.slab import Comparable, Slab, all_finite, cut_slab
from pipeline_filters.layout import Box, Span, Stretch, Stretches, UnitGrid, box_rows
from pipeline_filters.stream import Stream

Array = NDArray[Any]

# Samples of all channels pushed at a time: keeps what a push allocates small.
PIECE_SAMPLES = 1 << 19


class Reader(Protocol):
    """Where samples come from: paths and numbers only, so that it may be sent anywhere."""

    @property
    def time_dim(self) -> int:
        """Which dimension is time."""

    def read(self, start: int, stop: int, box: Box) -> Array:
        """Undecoded samples [start, stop) of a group of channels, source dimension order."""

    def rows(self, raw: Array) -> Array:
        """The same as rows of channels, time last; a view where it can be."""

    def decode(self, rows: Array, dtype: np.dtype[Any]) -> Array:
        """Rows in physical values, NaN where missing."""

    def screen(self, rows: Array, start: int, box: Box) -> None:
        """Refuses what the spec's policies refuse, with channel and time."""

    def stamps_ns(self, start: int, stop: int) -> NDArray[np.int64] | None:
        """Stamps of samples [start, stop); None for an unstamped source."""

    def place(self, index: int, row: int, box: Box) -> str:
        """Variable, channel and time of one sample, for people."""


class Writer(Protocol):
    """Where whole units go."""

    def write(self, start: int, stop: int, box: Box, values: Array) -> None:
        """Writes samples [start, stop) of a group of channels, result dimension order."""

    def write_stamps(self, start: int, stop: int, stamps_ns: NDArray[np.int64]) -> None:
        """Writes the time coordinate of samples [start, stop)."""


@dataclass(frozen=True, eq=False)
class Job:
    """What all spans of one result share; sent once to every worker.

    Attributes:
        chunk_samples: samples along time that the source decodes together.
        dtype: of the results, as kept.
        input_digest: of undecoded samples of one unit and their stamps.
        output_digest: of the results of one unit.
        stamps: the stamps of results [start, stop) from those of the samples there.
    """

    result: str
    chain: Chain
    reader: Reader
    writer: Writer
    grid: UnitGrid
    stretches: Stretches
    chunk_samples: int
    dtype: np.dtype[Any]
    input_digest: Callable[[Array, NDArray[np.int64] | None], bytes]
    output_digest: Callable[[Array], bytes]
    stamps: Callable[[int, int, NDArray[np.int64]], NDArray[np.int64]]


@dataclass
class SpanRecord:
    """What became of a span."""

    result: str
    units: list[tuple[tuple[int, ...], bytes, bytes]] = field(default_factory=list)
    samples_read: int = 0
    samples_written: int = 0
    samples_missing: int = 0
    chunks_decoded: int = 0
    seconds: float = 0.0
    peak_bytes: int = 0
    refused: FilterStageError | None = None


class Carry(Comparable):
    """What a chain with a recursion hands from one span to the next in its channels."""

    def __init__(self) -> None:
        self.stream: Stream | None = None
        self.ahead: list[Slab] = []
        self.raw: list[tuple[int, Array]] = []


def run_span(job: Job, span: Span, carry: Carry | None) -> tuple[SpanRecord, Carry | None]:
    """Runs one span; a refusal comes back in the record, with its problems.

    Args:
        carry: of the span before, for a chain with a recursion; None at the start, and for
            chains whose spans are independent.
    """
    record = SpanRecord(job.result)
    began = time.perf_counter()
    handed: Carry | None = None
    try:
        handed = _Work(job, span, carry or Carry(), record).run()
    except FilterStageError as error:
        record.refused = error
    record.seconds = time.perf_counter() - began
    record.peak_bytes = peak_bytes()
    return record, None if job.chain.independent else handed


class _Work:
    """The state of one span's run."""

    def __init__(self, job: Job, span: Span, carry: Carry, record: SpanRecord) -> None:
        self.job = job
        self.box = span.box
        self.rows = box_rows(span.box)
        self.start, self.stop = span.indexes(job.grid)
        self.carry = carry
        self.record = record
        self.next_out = self.start
        self.buffer: Array | None = None
        self.raw = carry.raw
        carry.raw = []
        self.input_digests: dict[int, dict[tuple[int, ...], bytes]] = {}

    def run(self) -> Carry:
        self._digest_complete()
        for stretch, low, high in self.job.stretches.within(self.start, self.stop):
            stream = self.carry.stream
            if stream is None or low == 0:
                stream = Stream(self.job.chain, self.rows, stretch, low, high)
            self.carry.stream = stream
            ahead, self.carry.ahead = self.carry.ahead, []
            for slab in ahead:
                self._give(slab)
            while stream.next_result < high:
                for slab in self._pushed(stream, stretch, high):
                    self._give(slab)
            if high == stretch.length:  # else results that ran ahead still belong to it
                self.carry.stream = None
        self._drop_raw()
        return self.carry

    def _pushed(self, stream: Stream, stretch: Stretch, high: int) -> Iterator[Slab]:
        """Reads on towards the results before ``high``, and pushes what it reads.

        A read ends with a chunk of the source, or with what is wanted. Small chunks are read
        several at a time, as each read has a cost of its own.
        """
        job = self.job
        start = stretch.start + stream.next_input
        unit = job.chunk_samples * max(1, PIECE_SAMPLES // (self.rows * job.chunk_samples))
        wanted = stretch.start + self._wanted(stretch, high)
        # A chain with a recursion may ask for more at a start: a chunk at a time, then.
        least = (start // job.chunk_samples + 1) * job.chunk_samples
        stop = min((start // unit + 1) * unit, max(wanted, least), stretch.stop)
        raw = job.reader.read(start, stop, self.box)
        self.record.samples_read += raw.size
        self.record.chunks_decoded += (
            (stop - 1) // job.chunk_samples - start // job.chunk_samples + 1
        )
        self._keep_raw(start, raw)
        rows = job.reader.rows(raw)
        size = max(4096, PIECE_SAMPLES // self.rows)
        for low in range(0, stop - start, size):
            piece = job.reader.decode(rows[:, low : low + size], job.chain.dtype)
            job.reader.screen(piece, start + low, self.box)
            yield stream.push(piece)

    def _wanted(self, stretch: Stretch, high: int) -> int:
        if self.job.chain.independent:
            return self.job.chain.reach().last_offset(stretch, high)
        return min(stretch.length, high + self.job.chain.hold_back)

    def _keep_raw(self, start: int, raw: Array) -> None:
        """Keeps the samples of this and later spans until their unit is complete."""
        dim = self.job.reader.time_dim
        skip = max(0, self.start - start)
        if skip < raw.shape[dim]:
            self.raw.append((start + skip, _cut(raw, dim, skip, raw.shape[dim])))
        self._digest_complete()

    def _digest_complete(self) -> None:
        """Digests the units of this span whose samples have all been read."""
        dim = self.job.reader.time_dim
        unit = self.job.grid.time_unit
        while self.raw:
            first = self.raw[0][0]
            end = self.raw[-1][0] + self.raw[-1][1].shape[dim]
            low = first // unit * unit
            high = min(low + unit, self.job.grid.length)
            if low >= self.stop or end < high:
                return
            self._digest_input(low, high)

    def _digest_input(self, low: int, high: int) -> None:
        dim = self.job.reader.time_dim
        parts, rest = [], []
        for start, raw in self.raw:
            stop = start + raw.shape[dim]
            if start < high:
                parts.append(_cut(raw, dim, 0, min(stop, high) - start))
            if stop > high:
                keep = max(start, high)
                rest.append((keep, _cut(raw, dim, keep - start, stop - start)))
        self.raw = rest
        whole = parts[0] if len(parts) == 1 else np.concatenate(parts, axis=dim)
        stamps = self.job.reader.stamps_ns(low, high)
        time_unit = low // self.job.grid.time_unit
        self.input_digests[time_unit] = {
            place: self.job.input_digest(_of_unit(whole, self.box, channels, dim), stamps)
            for place, channels in self.job.grid.units_in(self.box, time_unit)
        }
        if stamps is not None and all(part.start == 0 for part in self.box):
            self.job.writer.write_stamps(low, high, self.job.stamps(low, high, stamps))

    def _drop_raw(self) -> None:
        # What the next span will digest is kept; a view would hold its whole slab alive.
        dim = self.job.reader.time_dim
        if not self.job.chain.independent:
            self.carry.raw = [
                (start, _cut(raw, dim, 0, raw.shape[dim]).copy()) for start, raw in self.raw
            ]

    def _give(self, slab: Slab) -> None:
        """Lays results into the unit being filled; writes it when it is full."""
        done = 0
        while done < slab.length:
            if self.next_out >= self.stop:
                if not self.job.chain.independent:
                    self.carry.ahead.append(_own(slab, done))
                return
            unit = self.job.grid.time_unit
            low = self.next_out // unit * unit
            high = min(low + unit, self.job.grid.length)
            if self.buffer is None:
                self.buffer = self._new_buffer(high - low)
            count = min(high - self.next_out, slab.length - done)
            self._lay(slab, done, count, self.next_out - low)
            done += count
            self.next_out += count
            if self.next_out == high:
                self._write(low, high)

    def _new_buffer(self, length: int) -> Array:
        shape = [part.stop - part.start for part in self.box]
        shape.insert(self.job.grid.time_dim, length)
        return np.empty(shape, self.job.dtype)

    def _lay(self, slab: Slab, done: int, count: int, at: int) -> None:
        assert self.buffer is not None
        part = cut_slab(slab, done, done + count)
        target = np.moveaxis(self.buffer, self.job.grid.time_dim, -1)[..., at : at + count]
        place = partial(self._place, self.next_out)
        self.record.samples_missing += keep_results(target, part, self.job.result, place)

    def _place(self, start: int, row: int, column: int) -> str:
        return self.job.reader.place(start + column, row, self.box)

    def _write(self, low: int, high: int) -> None:
        assert self.buffer is not None
        job = self.job
        job.writer.write(low, high, self.box, self.buffer)
        time_unit = low // job.grid.time_unit
        inputs = self.input_digests.pop(time_unit)
        for place, channels in job.grid.units_in(self.box, time_unit):
            part = _of_unit(self.buffer, self.box, channels, job.grid.time_dim)
            self.record.units.append((place, inputs[place], job.output_digest(part)))
        self.record.samples_written += self.buffer.size
        self.buffer = None


def keep_results(target: Array, slab: Slab, result: str, place: Callable[[int, int], str]) -> int:
    """Lays results into an array of the kept type, NaN where missing.

    Args:
        target: shape (..., n), whose leading dimensions are the rows of ``slab``.
        place: names the sample at (row, column), for people.

    Returns:
        how many are missing.

    Raises:
        SourceError: results that are no finite numbers of the kept type although present.
    """
    values, missing = slab.values, slab.missing
    try:
        with np.errstate(over="raise", invalid="raise"):
            if target.ndim == 2:
                copy_rows(target, values)
            else:
                target[...] = values.reshape(target.shape)
        overflow = not all_finite(values)
    except FloatingPointError:
        overflow = True
    if overflow:
        _refuse_overflow(slab, target.dtype, result, place)
    if missing is None:
        return 0
    target[missing.reshape(target.shape)] = np.nan
    return int(np.count_nonzero(missing))


def _refuse_overflow(
    slab: Slab, dtype: np.dtype[Any], result: str, place: Callable[[int, int], str]
) -> None:
    with np.errstate(all="ignore"):
        wrong = ~np.isfinite(slab.values.astype(dtype))
    if slab.missing is not None:
        wrong &= ~slab.missing
    if not wrong.any():
        return
    row, column = (int(at[0]) for at in np.nonzero(wrong))
    declare = "declare the offending values as missing in the source (missing_value or valid_range)"
    if np.isfinite(slab.values[row, column]):
        found = f"result {result} is too large for {dtype} here"
        largest, remedy = np.finfo(dtype).max, f"{declare}, or state keep_as: float64"
    else:  # sums over a block have overflowed: the culprit may lie elsewhere in it
        found = f"result {result} cannot be formed here: a sample of the same block is too large"
        largest, remedy = np.finfo(slab.values.dtype).max, declare
    raise SourceError(
        Problem(place(row, column), found, f"magnitudes well below {largest:.3g}", remedy)
    )


def _cut(raw: Array, dim: int, start: int, stop: int) -> Array:
    index: list[slice] = [slice(None)] * raw.ndim
    index[dim] = slice(start, stop)
    return raw[tuple(index)]


def _own(slab: Slab, start: int) -> Slab:
    missing = None if slab.missing is None else slab.missing[:, start:].copy()
    return Slab(slab.values[:, start:].copy(), missing)


def _of_unit(values: Array, box: Box, channels: Box, time_dim: int) -> Array:
    index = [
        slice(part.start - whole.start, part.stop - whole.start)
        for part, whole in zip(channels, box, strict=True)
    ]
    index.insert(time_dim, slice(None))
    return values[tuple(index)]


def peak_bytes() -> int:
    """The largest resident memory of this process so far."""
    try:
        # What getrusage tells counts the process that this one was started by as well.
        with open("/proc/self/status", encoding="ascii") as status:
            for line in status:
                if line.startswith("VmHWM:"):
                    return int(line.split()[1]) * 1024
    except OSError:
        pass
    largest = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return largest if sys.platform == "darwin" else largest * 1024


Jobs = Mapping[str, Job]
