"""A source in a Zarr store: opened, checked against the spec's signals, read in slabs."""

from __future__ import annotations

import difflib
import itertools
from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import lru_cache
from math import ceil
from pathlib import Path
from typing import Any

import numpy as np
import zarr
from numpy.typing import NDArray

from pipeline_filters.errors import FilterStageError, Problem, SourceError
from pipeline_filters.source.axis import Axis, counted_axis, scan_axis
from pipeline_filters.source.cf_time import TimeUnitError, TimeUnits, stamp_text
from pipeline_filters.source.decoding import Decoding, build_decoding
from pipeline_filters.source.screening import screen_rows
from pipeline_filters.spec.model import Signal

Array = NDArray[Any]
Coordinate = tuple[tuple[str, ...], Array, Mapping[str, Any]]

# Stamps looked at in one go: a few megabytes.
SCAN_SAMPLES = 1 << 19


@lru_cache(maxsize=64)
def _open_array(path: str, name: str) -> Any:
    return zarr.open_array(str(Path(path) / name), mode="r")


def dimensions(array: Any) -> tuple[str, ...]:
    """The names of an array's dimensions, as Zarr v3 and v2 stores carry them; () if none."""
    names = getattr(array.metadata, "dimension_names", None) or array.attrs.get("_ARRAY_DIMENSIONS")
    if not names or any(name is None for name in names):
        return ()
    return tuple(str(name) for name in names)


@dataclass(frozen=True, eq=False)
class TimeStamps:
    """Where a signal's stamps are: paths and numbers only."""

    path: str
    name: str
    units: TimeUnits

    def read(self, start: int, stop: int) -> NDArray[np.int64]:
        """Stamps of samples [start, stop), int64 ns."""
        raw = np.asarray(_open_array(self.path, self.name)[start:stop])
        try:
            return self.units.to_ns(raw)
        except TimeUnitError as error:
            raise SourceError(Problem(f"coordinate {self.name}", str(error))) from None


@dataclass(frozen=True, eq=False)
class SignalReader:
    """Reads one signal: paths, names and slices only, so that it can be sent to a worker.

    Attributes:
        dims, shape, chunks, shards: of the kept channels, in the source's dimension order.
        time_dim: which of them is time.
        keep: for each dimension that is not time, the kept positions, or None for all.
        labels: for each dimension that is not time, its channel labels, or None.
    """

    signal: Signal
    path: str
    dims: tuple[str, ...]
    shape: tuple[int, ...]
    time_dim: int
    dtype: np.dtype[Any]
    chunks: tuple[int, ...]
    shards: tuple[int, ...] | None
    attrs: Mapping[str, Any]
    decoding: Decoding
    stamps: TimeStamps | None
    keep: tuple[tuple[int, ...] | None, ...]
    labels: tuple[tuple[str, ...] | None, ...]
    coords: Mapping[str, Coordinate] = field(default_factory=dict)

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
        """stamped, elapsed or counted."""
        return "counted" if self.stamps is None else self.stamps.units.kind

    def read(self, start: int, stop: int, box: tuple[slice, ...]) -> Array:
        """Undecoded samples [start, stop) of a box of channels, in source dimension order.

        Raises:
            SourceError: a chunk that is truncated or corrupt, by its name.
        """
        index: list[Any] = []
        for part, kept in zip(box, self.keep, strict=True):
            index.append(part if kept is None else _as_index(kept[part]))
        index.insert(self.time_dim, slice(start, stop))
        array = _open_array(self.path, self.signal.variable)
        try:
            if all(isinstance(part, slice) for part in index):
                return np.asarray(array[tuple(index)])
            return np.asarray(array.oindex[tuple(index)])
        except Exception as error:
            raise SourceError(self._unreadable(array, start, stop, box, error)) from error

    def rows(self, raw: Array) -> Array:
        """Raw samples as rows of channels, time last; a view where it can be."""
        moved = np.moveaxis(raw, self.time_dim, -1)
        return moved.reshape(-1, moved.shape[-1]) if moved.ndim != 2 else moved

    def decode(self, rows: Array, dtype: np.dtype[Any]) -> Array:
        """Rows in physical values, NaN where missing."""
        return self.decoding.decode(rows, dtype)

    def screen(self, rows: Array, start: int, box: tuple[slice, ...]) -> None:
        """Refuses missing and infinite samples where the spec says refuse."""
        screen_rows(rows, self.signal, lambda row, column: self.place(start + column, row, box))

    def stamps_ns(self, start: int, stop: int) -> NDArray[np.int64] | None:
        """Stamps of samples [start, stop), int64 ns; None for a counted source."""
        return None if self.stamps is None else self.stamps.read(start, stop)

    def place(self, index: int, row: int, box: tuple[slice, ...]) -> str:
        """Variable, channel and time of one sample, for people."""
        sizes = [part.stop - part.start for part in box]
        parts = [self.signal.variable]
        names = [name for dim, name in enumerate(self.dims) if dim != self.time_dim]
        for name, part, at, labels in zip(
            names, box, np.unravel_index(row, sizes) if sizes else (), self.labels, strict=True
        ):
            position = part.start + int(at)
            parts.append(f"{name} {labels[position] if labels else position}")
        stamp = self.stamps_ns(index, index + 1)
        parts.append(f"sample {index}" if stamp is None else stamp_text(int(stamp[0]), self.kind))
        return ", ".join(parts)

    def identity(self) -> dict[str, Any]:
        """What makes this source this source, whatever its path: JSON-able."""
        ends = None
        if self.stamps is not None:
            first = self.stamps.read(0, 1)
            last = self.stamps.read(self.length - 1, self.length)
            ends = [int(first[0]), int(last[0])]
        return {
            "variable": self.signal.variable,
            "dims": list(self.dims),
            "shape": list(self.shape),
            "dtype": self.dtype.str,
            "stamps_ns": ends,
            "decoding": self.decoding.facts(),
        }

    def _unreadable(
        self, array: Any, start: int, stop: int, box: tuple[slice, ...], error: Exception
    ) -> Problem:
        """Finds which chunk cannot be read, by reading them one by one."""
        bounds = [
            (part.start, part.stop) if kept is None else (min(kept[part]), max(kept[part]) + 1)
            for part, kept in zip(box, self.keep, strict=True)
        ]
        bounds.insert(self.time_dim, (start, stop))
        unit = array.shards or array.chunks
        ranges = [
            range(low // size, ceil(high / size))
            for (low, high), size in zip(bounds, unit, strict=True)
        ]
        broken = f"samples {start} to {stop}"
        for place in itertools.product(*ranges):
            index = tuple(
                slice(at * size, (at + 1) * size) for at, size in zip(place, unit, strict=True)
            )
            try:
                array[index]
            except Exception as found:
                broken = f"chunk {array.metadata.encode_chunk_key(place)}"
                error = found
                break
        return Problem(
            f"{Path(self.path) / self.signal.variable}, {broken}",
            f"cannot be read ({type(error).__name__}: {str(error)[:120]})",
            "whole chunks, or none (an absent chunk is fill)",
            "restore the chunk from its origin, or delete it to have it read as fill",
        )


def _as_index(kept: tuple[int, ...]) -> slice | NDArray[np.int64]:
    if kept and all(b - a == 1 for a, b in itertools.pairwise(kept)):
        return slice(kept[0], kept[-1] + 1)
    return np.array(kept, np.int64)


class Source:
    """An opened source: one reader per signal of the spec, and its time axes."""

    def __init__(self, path: str, readers: Mapping[str, SignalReader]) -> None:
        self.path = path
        self.readers = dict(readers)
        self._axes: dict[str, Axis] = {}

    def axis(self, name: str) -> Axis:
        """The checked time axis of a signal, scanned once.

        Raises:
            SourceError: the axis is refused.
        """
        if name not in self._axes:
            self._axes[name] = axis_of(self.readers[name])
        return self._axes[name]


def axis_of(reader: SignalReader) -> Axis:
    """Scans a reader's time axis, or counts its samples where it has none."""
    stamps = reader.stamps
    if stamps is None:
        return counted_axis(reader.length, reader.signal)
    array = _open_array(stamps.path, stamps.name)
    ends = np.array([array[0], array[reader.length - 1]])
    step_ns = float(10**9 / reader.signal.rate_hz)
    unit = (array.shards or array.chunks)[0]
    return scan_axis(
        stamps.read,
        reader.length,
        reader.signal,
        kind=stamps.units.kind,
        resolution_ns=stamps.units.resolution_ns(ends, step_ns),
        chunk_samples=unit * max(1, SCAN_SAMPLES // unit),
    )


def open_zarr_source(path: str, signals: Mapping[str, Signal]) -> Source:
    """Opens a Zarr store, or a group inside one, for the spec's signals.

    Raises:
        SourceError: with every problem of every signal.
    """
    try:
        group = zarr.open_group(path, mode="r")
    except Exception as error:
        hint = "a Zarr group on a local path"
        found = (
            "no such path"
            if not Path(path).exists()
            else f"not a Zarr group ({type(error).__name__})"
        )
        raise SourceError(
            Problem(path, found, hint, "name the store, or a group inside it")
        ) from None
    names = sorted(group.array_keys())
    problems: list[Problem] = []
    readers: dict[str, SignalReader] = {}
    for name, signal in signals.items():
        try:
            readers[name] = _open_signal(path, group, names, signal)
        except FilterStageError as error:
            problems += error.problems
    if problems:
        raise SourceError(*dict.fromkeys(problems))
    return Source(path, readers)


def _nearest(word: str, words: list[str]) -> str:
    close = difflib.get_close_matches(word, words, 1)
    return f"did you mean {close[0]}?" if close else ""


def _open_signal(path: str, group: Any, names: list[str], signal: Signal) -> SignalReader:
    where = f"{path}, variable {signal.variable}"
    if signal.variable not in names:
        raise SourceError(
            Problem(
                where,
                "no such array",
                f"the store has {', '.join(names) or 'no arrays'}",
                _nearest(signal.variable, names) or "name one of them under signals",
            )
        )
    array = group[signal.variable]
    attrs = dict(array.attrs)
    dims = dimensions(array)
    if not dims and array.ndim == 1:
        dims = (signal.time,)
    if signal.time not in dims:
        raise SourceError(
            Problem(
                where,
                f"no dimension {signal.time}",
                f"its dimensions are {', '.join(dims) or 'not named'}",
                _nearest(signal.time, list(dims)) or "state time: with the dimension's name",
            )
        )
    time_dim = dims.index(signal.time)
    if not all(array.shape):
        raise SourceError(Problem(where, "no samples", f"shape {array.shape}"))
    attrs = _with_v2_marker(array, attrs)
    problems: list[Problem] = []
    decoding = Decoding()
    try:
        decoding = build_decoding(array.dtype, attrs, signal)
    except SourceError as error:
        problems += error.problems
    unit = attrs.get("units")
    if signal.unit is not None and unit != signal.unit:
        problems.append(
            Problem(
                where,
                f"its unit is {unit!r}",
                f"the spec states {signal.unit!r}",
                "make the two agree",
            )
        )
    stamps = None
    if signal.time in names:
        try:
            stamps = _open_stamps(path, group, signal, array.shape[time_dim])
        except SourceError as error:
            problems += error.problems
    coords = _channel_coords(group, names, dims, time_dim)
    keep: dict[str, tuple[int, ...]] = {}
    try:
        keep = _kept(signal, dims, time_dim, coords, where)
    except SourceError as error:
        problems += error.problems
    if problems:
        raise SourceError(*problems)
    others = [dim for dim in dims if dim != signal.time]
    shape = tuple(len(keep[d]) if d in keep else n for d, n in zip(dims, array.shape, strict=True))
    return SignalReader(
        signal,
        path,
        dims,
        shape,
        time_dim,
        array.dtype,
        _clipped(array.chunks, shape),
        None if array.shards is None else _clipped(array.shards, shape),
        attrs,
        decoding,
        stamps,
        tuple(keep.get(dim) for dim in others),
        tuple(_labels(dim, coords, keep.get(dim)) for dim in others),
        {name: _kept_coord(coord, keep) for name, coord in coords.items()},
    )


def _clipped(sizes: tuple[int, ...], shape: tuple[int, ...]) -> tuple[int, ...]:
    return tuple(min(size, n) for size, n in zip(sizes, shape, strict=True))


def _with_v2_marker(array: Any, attrs: dict[str, Any]) -> dict[str, Any]:
    """Stores in format 2 carry CF's _FillValue as the array's fill value; 0 is no marker.

    In format 3 the two are apart, and a fill value alone is not missing.
    """
    fill = array.fill_value
    cf = array.metadata.zarr_format == 2 and "_ARRAY_DIMENSIONS" in attrs
    if cf and "_FillValue" not in attrs and fill is not None and fill == fill and fill != 0:
        return {**attrs, "_FillValue": fill.item() if isinstance(fill, np.generic) else fill}
    return attrs


def _open_stamps(path: str, group: Any, signal: Signal, length: int) -> TimeStamps:
    where = f"{path}, coordinate {signal.time}"
    array = group[signal.time]
    attrs = dict(array.attrs)
    if array.ndim != 1 or array.shape[0] != length:
        raise SourceError(
            Problem(where, f"shape {array.shape}", f"one stamp for each of {length} samples")
        )
    units = attrs.get("units")
    if array.dtype.kind not in "iuf" or not isinstance(units, str):
        raise SourceError(
            Problem(
                where,
                f"type {array.dtype}, units {units!r}",
                "numbers with a CF unit, such as 'seconds since 1970-01-01' or 's'",
                "set the units attribute of the time coordinate",
            )
        )
    try:
        parsed = TimeUnits.parse(units, str(attrs.get("calendar", "standard")))
    except TimeUnitError as error:
        raise SourceError(Problem(where, str(error))) from None
    if {"scale_factor", "add_offset"} & attrs.keys():
        raise SourceError(
            Problem(where, "packed stamps", "stamps without scale_factor or add_offset")
        )
    return TimeStamps(path, signal.time, parsed)


def _channel_coords(
    group: Any, names: list[str], dims: tuple[str, ...], time_dim: int
) -> dict[str, Coordinate]:
    """Small coordinates along channel dimensions only."""
    wanted = set(dims) - {dims[time_dim]}
    listed = set(str(group.attrs.get("coordinates", "")).split())
    for name in names:
        listed |= set(str(group[name].attrs.get("coordinates", "")).split())
    coords: dict[str, Coordinate] = {}
    for name in names:
        if name not in wanted and name not in listed:
            continue
        array = group[name]
        along = dimensions(array)
        if along and set(along) <= wanted:
            attrs = {k: v for k, v in dict(array.attrs).items() if k != "_ARRAY_DIMENSIONS"}
            coords[name] = (along, np.asarray(array[...]), attrs)
    return coords


def _kept(
    signal: Signal,
    dims: tuple[str, ...],
    time_dim: int,
    coords: Mapping[str, Coordinate],
    where: str,
) -> dict[str, tuple[int, ...]]:
    if signal.channels is None:
        return {}
    dim = signal.channels.dimension
    others = [d for i, d in enumerate(dims) if i != time_dim]
    if dim not in others:
        raise SourceError(
            Problem(
                where,
                f"no channel dimension {dim}",
                f"it has {', '.join(others) or 'none'}",
                _nearest(dim, others),
            )
        )
    if dim not in coords:
        raise SourceError(
            Problem(where, f"dimension {dim} has no labels", "a coordinate of that name to keep by")
        )
    labels = [str(label) for label in coords[dim][1].tolist()]
    absent = [str(label) for label in signal.channels.keep if str(label) not in labels]
    if absent:
        raise SourceError(
            *(
                Problem(
                    where,
                    f"no {dim} {label}",
                    f"there are {', '.join(labels[:24])}{' ...' if len(labels) > 24 else ''}",
                    _nearest(label, labels),
                )
                for label in absent
            )
        )
    return {dim: tuple(labels.index(str(label)) for label in signal.channels.keep)}


def _labels(
    dim: str, coords: Mapping[str, Coordinate], kept: tuple[int, ...] | None
) -> tuple[str, ...] | None:
    if dim not in coords:
        return None
    labels = [str(label) for label in coords[dim][1].tolist()]
    return tuple(labels if kept is None else [labels[at] for at in kept])


def _kept_coord(coord: Coordinate, keep: Mapping[str, tuple[int, ...]]) -> Coordinate:
    along, values, attrs = coord
    for axis, dim in enumerate(along):
        if dim in keep:
            values = np.take(values, keep[dim], axis=axis)
    return along, values, attrs
