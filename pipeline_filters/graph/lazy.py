"""Results as dask arrays with the user's own chunks: the same kernels, inside their own graph.

A chain of taps makes one task a chunk, which looks at the chunks its block reach touches. A
chain with a recursion makes two: one that goes on from the carry of the chunk before it, and
one that takes the results out of that.
"""

from __future__ import annotations

import copy
from collections.abc import Sequence
from dataclasses import dataclass
from functools import partial
from itertools import accumulate, pairwise
from itertools import product as all_places
from typing import Any, Protocol

import dask.array as da
import numpy as np
from dask.base import tokenize
from dask.highlevelgraph import HighLevelGraph
from numpy.typing import NDArray

from pipeline_filters.chain.model import Chain
from pipeline_filters.kernels.slab import Slab, cut_slab
from pipeline_filters.layout import Box, Stretches, without
from pipeline_filters.spans import PIECE_SAMPLES, keep_results
from pipeline_filters.stream import Stream

Array = NDArray[Any]


class Decoder(Protocol):
    """What a task needs of a reader; it is sent with every task, so it must be small."""

    @property
    def time_dim(self) -> int:
        """Which dimension is time."""

    def rows(self, raw: Array) -> Array:
        """Samples as rows of channels, time last."""

    def decode(self, rows: Array, dtype: np.dtype[Any]) -> Array:
        """Rows in physical values, NaN where missing."""

    def screen(self, rows: Array, start: int, box: Box) -> None:
        """Refuses what the spec's policies refuse."""

    def place(self, index: int, row: int, box: Box) -> str:
        """Variable, channel and time of one sample, for people."""


@dataclass(frozen=True, eq=False)
class LazyJob:
    """What the tasks of one result share."""

    result: str
    chain: Chain
    decoder: Decoder
    dtype: np.dtype[Any]


@dataclass(frozen=True, eq=False)
class Piece:
    """One chunk of a result: where it lies, and which samples are put before its task.

    Attributes:
        start, stop: its samples along time.
        box: its channels.
        first: index of the first sample given.
        stretches: those that have samples in it.
    """

    start: int
    stop: int
    box: Box
    first: int
    stretches: Stretches


@dataclass(eq=False)
class _Going:
    """What a chain with a recursion hands on, and the results of its chunk."""

    stream: Stream | None
    ahead: list[Slab]
    values: Array


def lazy_result(job: LazyJob, samples: da.Array, stretches: Stretches, token: str) -> da.Array:
    """One result as a dask array, chunked as its samples are.

    Args:
        samples: undecoded, in the source's dimension order.
        token: tells what is done from all else; equal for equal work.
    """
    time_dim = job.decoder.time_dim
    edges = [tuple(accumulate(sizes, initial=0)) for sizes in samples.chunks]
    name = f"{job.result}-{tokenize(token, samples.name)}"
    layer: dict[Any, Any] = {}
    for place in all_places(*(range(len(sizes)) for sizes in without(samples.chunks, time_dim))):
        box = tuple(
            slice(own[at], own[at + 1])
            for own, at in zip(without(edges, time_dim), place, strict=True)
        )
        before: Any = None
        for index, (start, stop) in enumerate(pairwise(edges[time_dim])):
            key = (name, *_with_time(place, time_dim, index))
            first, last = _asked(job.chain, stretches, start, stop)
            blocks = _touched(edges[time_dim], first, last)
            piece = Piece(
                start, stop, box, edges[time_dim][blocks.start], stretches.part(start, stop)
            )
            keys = [(samples.name, *_with_time(place, time_dim, block)) for block in blocks]
            if job.chain.independent:
                layer[key] = (_filtered, job, piece, keys)
            else:
                going = (f"{name}-going", *key[1:])
                layer[going] = (_gone_on, job, piece, before, keys)
                layer[key] = (_values, going)
                before = going
    collections: Any = [samples]
    graph = HighLevelGraph.from_collections(name, layer, dependencies=collections)
    array: Any = da.Array
    built: da.Array = array(graph, name, samples.chunks, dtype=job.dtype)
    return built


def as_dask(samples: Any) -> da.Array:
    """Samples as a dask array: as they are, or numpy's as one chunk."""
    if isinstance(samples, da.Array):
        return samples
    from_array: Any = da.from_array
    built: da.Array = from_array(samples, chunks=-1)
    return built


def _with_time(place: Sequence[int], time_dim: int, index: int) -> tuple[int, ...]:
    return (*place[:time_dim], index, *place[time_dim:])


def _asked(chain: Chain, stretches: Stretches, start: int, stop: int) -> tuple[int, int]:
    """The samples [first, last) that the results [start, stop) may ask for."""
    first, last = start, stop
    for stretch, low, high in stretches.within(start, stop):
        if chain.independent:
            reach = chain.reach()
            first = min(first, stretch.start + reach.first_offset(stretch, low, high))
            last = max(last, stretch.start + reach.last_offset(stretch, high))
        else:
            last = max(last, stretch.start + min(stretch.length, high + chain.hold_back))
    return first, last


def _touched(edges: Sequence[int], first: int, last: int) -> range:
    low = int(np.searchsorted(edges, first, side="right")) - 1
    return range(low, int(np.searchsorted(edges, last, side="left")))


def _filtered(job: LazyJob, piece: Piece, blocks: list[Array]) -> Array:
    """One task: the results of one chunk."""
    return _run(job, piece, None, blocks).values


def _gone_on(job: LazyJob, piece: Piece, before: _Going | None, blocks: list[Array]) -> _Going:
    """One task: the results of one chunk after the chunk before it, which stays as it was."""
    return _run(job, piece, before, blocks)


def _values(going: _Going) -> Array:
    return going.values


def _run(job: LazyJob, piece: Piece, before: _Going | None, blocks: list[Array]) -> _Going:
    time_dim = job.decoder.time_dim
    raw = blocks[0] if len(blocks) == 1 else np.concatenate(blocks, axis=time_dim)
    rows = job.decoder.rows(np.asarray(raw))
    # What is handed on belongs to the graph: others may go on from it too.
    stream = None if before is None else copy.deepcopy(before.stream)
    ahead = [] if before is None else list(before.ahead)
    shape = [part.stop - part.start for part in piece.box]
    values = np.empty((rows.shape[0], piece.stop - piece.start), job.dtype)
    at = piece.start
    for stretch, low, high in piece.stretches.within(piece.start, piece.stop):
        if stream is None or low == 0:
            stream = Stream(job.chain, rows.shape[0], stretch, low, high)
        end = stretch.start + high
        given, ahead = ahead, []
        while at < end:
            slab = given.pop(0) if given else _pushed(job, piece, rows, stretch.start, stream)
            count = min(slab.length, end - at)
            target = values[:, at - piece.start : at - piece.start + count]
            place = partial(_place, job, piece, at)
            keep_results(target, cut_slab(slab, 0, count), job.result, place)
            at += count
            if count < slab.length:
                ahead = [cut_slab(slab, count, slab.length)]
        ahead += given
        if high == stretch.length:
            stream, ahead = None, []
    moved = np.moveaxis(values.reshape(*shape, values.shape[1]), -1, time_dim)
    return _Going(stream, ahead, moved)


def _pushed(job: LazyJob, piece: Piece, rows: Array, origin: int, stream: Stream) -> Slab:
    start = origin + stream.next_input
    size = max(4096, PIECE_SAMPLES // rows.shape[0])
    stop = min(start + size, origin + stream.length, piece.first + rows.shape[1])
    if stop <= start:
        raise AssertionError("a chunk's task was given too few samples")
    part = rows[:, start - piece.first : stop - piece.first]
    decoded = job.decoder.decode(part, job.chain.dtype)
    job.decoder.screen(decoded, start, piece.box)
    return stream.push(decoded)


def _place(job: LazyJob, piece: Piece, start: int, row: int, column: int) -> str:
    return job.decoder.place(start + column, row, piece.box)
