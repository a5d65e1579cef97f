"""What an opened source is, wherever it lies: a reader for each signal, and their axes."""

from __future__ import annotations

import hashlib
import json
from abc import ABC, abstractmethod
from collections.abc import Mapping
from dataclasses import dataclass
from math import prod
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pipeline_filters.errors import Problem, SourceError
from pipeline_filters.source.axis import Axis, counted_axis
from pipeline_filters.source.axis_scan import StampReader, scan_axis
from pipeline_filters.source.cf_time import TimeUnitError, stamp_text
from pipeline_filters.source.decoding import Decoding
from pipeline_filters.source.offers import Coordinate
from pipeline_filters.source.screening import screen_rows
from pipeline_filters.spec.model import Signal

Array = NDArray[Any]


def rows_of(raw: Array, time_dim: int) -> Array:
    """Samples as rows of channels: shape (channels in C order, time).

    A view where strides allow it: always for up to two dimensions, for time first or last in
    any number of them.
    """
    moved = np.moveaxis(raw, time_dim, -1)
    return moved.reshape(prod(moved.shape[:-1]), moved.shape[-1])


@dataclass(frozen=True, eq=False)
class SignalReader(ABC):
    """Reads one signal of the spec.

    Attributes:
        signal: as the spec states it.
        dims, shape: of the kept channels, in the source's dimension order.
        time_dim: which of them is time.
        dtype: of undecoded samples.
        attrs: the variable's attributes, as stored.
        decoding: how undecoded samples become values.
        keep: for each dimension that is not time, the kept positions, or None for all.
        labels: for each dimension that is not time, the labels of the kept, or None.
        coords: the coordinates along channel dimensions only: name to dimensions, values of
            the kept, attributes.
        stamps: the time coordinate; None for a counted source.
        chunks: what is decoded together, per dimension.
        shards: what lies in one file where that is more, else None.
    """

    signal: Signal
    dims: tuple[str, ...]
    shape: tuple[int, ...]
    time_dim: int
    dtype: np.dtype[Any]
    attrs: Mapping[str, Any]
    decoding: Decoding
    keep: tuple[tuple[int, ...] | None, ...]
    labels: tuple[tuple[str, ...] | None, ...]
    coords: Mapping[str, Coordinate]
    stamps: StampReader | None
    chunks: tuple[int, ...]
    shards: tuple[int, ...] | None

    @abstractmethod
    def read(self, start: int, stop: int, box: tuple[slice, ...]) -> Array:
        """Undecoded samples [start, stop) of a box of kept channels.

        Args:
            box: one slice for each dimension that is not time, in order.

        Returns:
            samples in the source's dimension order.

        Raises:
            SourceError: samples that cannot be read, by their place.
        """

    @property
    def length(self) -> int:
        """Samples along time."""
        return self.shape[self.time_dim]

    @property
    def chunk_samples(self) -> int:
        """Samples along time that are decoded together."""
        return self.chunks[self.time_dim]

    @property
    def kind(self) -> str:
        """Which kind of axis: stamped, elapsed or counted."""
        return "counted" if self.stamps is None else self.stamps.units.kind

    @property
    def channel_dims(self) -> tuple[str, ...]:
        """The dimensions that are not time, in order."""
        return self.dims[: self.time_dim] + self.dims[self.time_dim + 1 :]

    def rows(self, raw: Array) -> Array:
        """Samples as rows of channels, time last; a view where it can be."""
        return rows_of(raw, self.time_dim)

    def decode(self, rows: Array, dtype: np.dtype[Any]) -> Array:
        """Rows in physical values, NaN where missing."""
        return self.decoding.decode(rows, dtype)

    def screen(self, rows: Array, start: int, box: tuple[slice, ...]) -> None:
        """Refuses missing and infinite samples where the spec says refuse.

        Args:
            rows: decoded samples of ``box``, shape (channels, samples), from index ``start``.

        Raises:
            SourceError: the earliest such sample of each kind, with its channel and time.
        """
        screen_rows(rows, self.signal, lambda row, column: self.place(start + column, row, box))

    def stamps_ns(self, start: int, stop: int) -> NDArray[np.int64] | None:
        """Stamps of samples [start, stop), int64 ns; None for a counted source.

        Raises:
            SourceError: a stamp that is missing or out of range; stamps that cannot be read.
        """
        if self.stamps is None:
            return None
        try:
            return self.stamps.units.to_ns(self.stamps.read(start, stop))
        except TimeUnitError as error:
            at = start + (error.at or 0)
            where = f"{self.signal.variable}, coordinate {self.stamps.name}, sample {at}"
            raise SourceError(Problem(where, error.found, error.allowed, error.remedy)) from None

    def channel_coords(self) -> Mapping[str, Coordinate]:
        """The coordinates along channel dimensions only, of the kept channels."""
        return self.coords

    def place(self, index: int, row: int, box: tuple[slice, ...]) -> str:
        """Variable, channel and time of one sample, for people."""
        sizes = [part.stop - part.start for part in box]
        parts = [self.signal.variable]
        for name, part, at, labels in zip(
            self.channel_dims,
            box,
            np.unravel_index(row, sizes) if sizes else (),
            self.labels,
            strict=True,
        ):
            position = part.start + int(at)
            parts.append(f"{name} {labels[position] if labels else position}")
        stamp = self.stamps_ns(index, index + 1)
        parts.append(f"sample {index}" if stamp is None else stamp_text(int(stamp[0]), self.kind))
        return ", ".join(parts)

    def identity(self) -> dict[str, Any]:
        """What makes this source this source, wherever it lies and however it is chunked.

        JSON-able: variable, dimensions, shape, type, first and last stamp, unit, decoding,
        and a digest of the kept channels' labels.
        """
        stamps = [self.stamps_ns(at, at + 1) for at in (0, self.length - 1)]
        ends = [int(stamp[0]) for stamp in stamps if stamp is not None] or None
        unit = self.attrs.get("units")
        return {
            "variable": self.signal.variable,
            "dims": list(self.dims),
            "shape": list(self.shape),
            "dtype": self.dtype.newbyteorder("=").name,
            "stamps_ns": ends,
            "unit": None if unit is None else str(unit),
            "decoding": self.decoding.facts(),
            "channels": hashlib.sha256(json.dumps(self.labels).encode()).hexdigest()[:16],
        }


class Source:
    """An opened source: a reader for each signal of the spec, and its time axes."""

    def __init__(self, path: str, readers: Mapping[str, SignalReader]) -> None:
        self.path = path
        self.readers = dict(readers)
        self._axes: dict[tuple[Any, ...], Axis] = {}

    def axis(self, name: str) -> Axis:
        """The checked time axis of a signal; signals that share one share its scan.

        Raises:
            SourceError: the axis is refused.
        """
        reader = self.readers[name]
        signal, stamps = reader.signal, reader.stamps
        key = (
            None if stamps is None else stamps.name,
            reader.length,
            signal.rate_hz,
            signal.breaks,
            signal.rate_tolerance,
        )
        if key not in self._axes:
            self._axes[key] = (
                counted_axis(reader.length, signal)
                if stamps is None
                else scan_axis(stamps, reader.length, signal)
            )
        return self._axes[key]
