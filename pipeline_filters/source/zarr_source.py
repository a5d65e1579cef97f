"""A source in a Zarr store on a local path: opened, and read straight from its arrays."""

from __future__ import annotations

import json
import os
from collections.abc import Mapping
from dataclasses import dataclass
from fractions import Fraction
from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np
import zarr
from numpy.typing import NDArray

from pipeline_filters.errors import Problem, SourceError
from pipeline_filters.source.cf_time import TimeUnits
from pipeline_filters.source.fitting import Fit, fit_all
from pipeline_filters.source.offers import Offer
from pipeline_filters.source.readers import SignalReader, Source, rows_of
from pipeline_filters.source.stored_array import (
    StoredArray,
    open_array,
    told,
    without_format_warnings,
)
from pipeline_filters.spec.model import Signal

__all__ = ["SignalReader", "Source", "ZarrReader", "ZarrStamps", "open_zarr_source", "rows_of"]

Array = NDArray[Any]

# A chunk of stamps up to this size is held while samples of it are asked for in smaller runs.
_HELD_BYTES = 16 << 20


class ZarrStamps:
    """A time coordinate in a Zarr store. Holds the last chunk it decoded, if that is small."""

    def __init__(self, array: StoredArray, units: TimeUnits, chunk_samples: int) -> None:
        self.array = array
        self.units = units
        self.chunk_samples = chunk_samples
        self._held: tuple[int, int, Array] | None = None

    def __getstate__(self) -> dict[str, Any]:
        return {**vars(self), "_held": None}

    @property
    def name(self) -> str:
        """The coordinate's name."""
        return self.array.name

    def read(self, start: int, stop: int) -> Array:
        """Raw stamps of samples [start, stop).

        Raises:
            SourceError: a chunk that is truncated or corrupt, by its name.
        """
        held = self._held  # one look: other threads may set it
        if held is None or start < held[0] or stop > held[1]:
            unit = self.chunk_samples
            low = start // unit * unit
            high = min(-(-stop // unit) * unit, self.array.shape[0])
            if (low, high) == (start, stop) or unit * self.array.dtype.itemsize > _HELD_BYTES:
                return self.array.read((slice(start, stop),))
            held = (low, high, self.array.read((slice(low, high),)))
            self._held = held
        return held[2][start - held[0] : stop - held[0]]

    def resolution_ns(self, step_ns: Fraction) -> Fraction:
        """How coarse the stamps are, beside a step of ``step_ns``."""
        last = self.array.shape[0] - 1
        ends = np.concatenate([self.read(0, 1), self.read(last, last + 1)])
        return self.units.resolution_ns(ends, step_ns)


@dataclass(frozen=True, eq=False)
class ZarrReader(SignalReader):
    """Reads one signal from a Zarr store; paths and numbers only, so it may be sent anywhere.

    Attributes:
        path: the group that the variable lies in.
        array: the variable.
    """

    path: str
    array: StoredArray

    def read(self, start: int, stop: int, box: tuple[slice, ...]) -> Array:
        """Undecoded samples [start, stop) of a box of kept channels, in the source's order.

        Raises:
            SourceError: a chunk that is truncated or corrupt, by its name.
        """
        keep = list(self.keep)
        index: list[slice | NDArray[np.int64]] = [*box]
        keep.insert(self.time_dim, None)
        index.insert(self.time_dim, slice(start, stop))
        taken: list[tuple[int, NDArray[np.int64]]] = []
        for dim, kept in enumerate(keep):
            part = index[dim]
            if kept is not None and isinstance(part, slice):
                index[dim], rest = _positions(kept[part], self.array.chunks[dim])
                taken += [] if rest is None else [(dim, rest)]
        raw = self.array.read(tuple(index))
        for dim, rest in taken:
            raw = np.take(raw, rest, axis=dim)
        return raw


def _positions(
    kept: tuple[int, ...], chunk: int
) -> tuple[slice | NDArray[np.int64], NDArray[np.int64] | None]:
    """How to read some positions: an index, and what to take of that (None: all of it).

    A slice is read faster than positions, and taking some of it costs little; only where that
    would decode chunks that hold none of them are they read by position.
    """
    step = kept[1] - kept[0] if len(kept) > 1 else 1
    if step > 0 and all(after - before == step for before, after in pairwise(kept)):
        return slice(kept[0], kept[-1] + 1, step), None
    positions = np.array(kept, np.int64)
    low, high = min(kept), max(kept)
    if len({at // chunk for at in kept}) == high // chunk - low // chunk + 1:
        return slice(low, high + 1), positions - low
    return positions, None


class _Group:
    """What a Zarr group offers; arrays are opened as they are asked for."""

    def __init__(self, path: str, group: Any) -> None:
        self.where = path
        self._group = group
        self._found: dict[str, Offer | None] = {}

    def find(self, name: str) -> Offer | None:
        if name not in self._found:
            self._found[name] = self._open(name)
        return self._found[name]

    def names(self) -> list[str]:
        # Not by zarr, which stops or warns at whatever else lies there.
        return sorted(place.name for place in Path(self.where).iterdir() if _is_array(place))

    def shared_coordinates(self) -> str:
        return str(self._group.attrs.get("coordinates", ""))

    def _open(self, name: str) -> Offer | None:
        path = Path(self.where) / name
        if "/" in name or name in ("", ".", "..") or not os.path.isdir(path):
            return None
        try:
            array = open_array(path)
        except Exception as error:
            if isinstance(error, FileNotFoundError) or _is_group(path):
                return None
            raise SourceError(
                Problem(
                    str(path),
                    f"cannot be opened ({told(error)})",
                    "an array of Zarr format 2 or 3",
                    "restore the array's metadata from its origin",
                )
            ) from error
        attrs = {key: value for key, value in array.attrs.items() if key != "_ARRAY_DIMENSIONS"}
        stored = StoredArray(os.path.abspath(self.where), name, array)
        return Offer(
            name,
            _dimension_names(array),
            array.shape,
            array.dtype,
            {**_marker_of_format_2(array), **attrs},
            lambda: stored.read((slice(None),) * array.ndim),
            stored,
        )


def _dimension_names(array: Any) -> tuple[str, ...]:
    """As Zarr v3 stores them, or as xarray does in v2; () where they are not all named."""
    names = getattr(array.metadata, "dimension_names", None) or array.attrs.get("_ARRAY_DIMENSIONS")
    if not isinstance(names, (list, tuple)) or len(names) != array.ndim or None in names:
        return ()
    return tuple(str(name) for name in names)


def _marker_of_format_2(array: Any) -> dict[str, Any]:
    """CF's _FillValue, which writers of format 2 keep as the array's fill value.

    There 0 is no marker: it is what stores without CF have. In format 3 the two are apart,
    and a fill value alone is not missing.
    """
    fill = array.fill_value
    if array.metadata.zarr_format != 2 or "_ARRAY_DIMENSIONS" not in array.attrs:
        return {}
    if array.dtype.kind not in "fiu" or fill is None or fill != fill or fill == 0:
        return {}
    return {"_FillValue": fill.item() if isinstance(fill, np.generic) else fill}


def open_zarr_source(path: str | os.PathLike[str], signals: Mapping[str, Signal]) -> Source:
    """Opens a Zarr store, or a group inside one (``store.zarr/group``), for a spec's signals.

    Formats 2 and 3; consolidated metadata, which goes stale, is not used.

    Raises:
        SourceError: with every problem of every signal.
    """
    path = os.fspath(path)
    with without_format_warnings():
        fits = fit_all(_Group(path, _open_group(path)), signals)
        return Source(path, {name: _reader(fit) for name, fit in fits.items()})


def _reader(fit: Fit) -> ZarrReader:
    array: StoredArray = fit.offer.array
    stamps = None
    if fit.time_offer is not None and fit.time_units is not None:
        stored: StoredArray = fit.time_offer.array
        stamps = ZarrStamps(stored, fit.time_units, stored.chunks[0])
    return ZarrReader(
        **fit.reader_facts(),
        stamps=stamps,
        chunks=fit.clipped(array.chunks),
        shards=None if array.shards is None else _whole_shards(fit, array),
        path=array.path,
        array=array,
    )


def _whole_shards(fit: Fit, array: StoredArray) -> tuple[int, ...]:
    """Shards no longer than what is kept, but of whole chunks, as shards must be."""
    assert array.shards is not None
    sizes = zip(fit.clipped(array.shards), fit.clipped(array.chunks), strict=True)
    return tuple(-(-shard // chunk) * chunk for shard, chunk in sizes)


def _open_group(path: str) -> Any:
    if "://" not in path and os.path.isdir(path):
        try:
            return zarr.open_group(os.path.abspath(path), mode="r", use_consolidated=False)
        except Exception as error:
            raise SourceError(_no_group(path, error)) from None
    raise SourceError(_no_group(path, None))


def _no_group(path: str, error: Exception | None) -> Problem:
    found, remedy = "not a Zarr group", "name the store, or a group in it"
    if "://" in path:
        found, remedy = "not a local path", "mount or copy the store, and name its local path"
    elif error is None:
        found = "a file" if os.path.exists(path) else "no such path"
    elif _is_array(Path(path)):
        found, remedy = (
            "one array",
            f"name the group that it lies in: {Path(path).absolute().parent}",
        )
    elif not isinstance(error, FileNotFoundError):
        found = f"its metadata cannot be read ({told(error)})"
        remedy = "restore the group's metadata from its origin"
    return Problem(path or "''", found, "a Zarr group on a local path", remedy)


def _is_array(place: Path) -> bool:
    if not place.is_dir():
        return False
    try:
        open_array(place)
    except Exception:
        return False
    return True


def _is_group(place: Path) -> bool:
    """Whether its metadata say so; zarr takes a folder with metadata of no kind for a group."""
    try:
        if (place / ".zgroup").is_file():
            return True
        return bool(json.loads((place / "zarr.json").read_bytes())["node_type"] == "group")
    except Exception:
        return False
