"""One array of a Zarr store: opened where it is read, its broken chunks named."""

from __future__ import annotations

import itertools
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from math import ceil
from pathlib import Path
from typing import Any

import numpy as np
import zarr
from numpy.typing import NDArray
from zarr.abc.store import ByteRequest
from zarr.core.buffer import Buffer, BufferPrototype
from zarr.storage import LocalStore

from pipeline_filters.errors import Problem, SourceError

Array = NDArray[Any]
Index = tuple["slice | NDArray[np.int64]", ...]


class _WholeChunks(LocalStore):
    """A local store that refuses chunks which decoders would pass over in silence.

    Blosc reads on past the end of a truncated chunk, and zarr takes an empty shard for an
    absent one.
    """

    blosc = False  # whether files are what Blosc wrote, with their length in the header

    async def get(
        self,
        key: str,
        prototype: BufferPrototype | None = None,
        byte_range: ByteRequest | None = None,
    ) -> Buffer | None:
        found = await super().get(key, prototype, byte_range)
        return self._checked(key, found, byte_range)

    def get_sync(
        self,
        key: str,
        *,
        prototype: BufferPrototype | None = None,
        byte_range: ByteRequest | None = None,
    ) -> Buffer | None:
        found = super().get_sync(key, prototype=prototype, byte_range=byte_range)
        return self._checked(key, found, byte_range)

    def _checked(
        self, key: str, found: Buffer | None, byte_range: ByteRequest | None
    ) -> Buffer | None:
        name = key.rpartition("/")[2]
        if found is None or name == "zarr.json" or name.startswith("."):
            return found
        size = len(found)
        if not size:
            raise ValueError("an empty file")
        if self.blosc and byte_range is None:
            whole = max(16, int.from_bytes(found[:16].to_bytes()[12:], "little"))
            if size < whole:
                raise ValueError(f"truncated: {size} bytes of {whole}")
        return found


def open_array(path: Path) -> Any:
    """A Zarr array on a local path, for reading; raises what zarr raises."""
    store = _WholeChunks(path, read_only=True)
    array = zarr.open_array(store, mode="r")
    outermost = [*array.filters, *array.compressors][-1:]
    is_blosc = any("blosc" in type(codec).__name__.lower() for codec in outermost)
    store.blosc = is_blosc and array.shards is None
    return array


class StoredArray:
    """An array by its path; small to send, and opened anew wherever it arrives.

    Attributes:
        path: the group that it lies in, absolute.
        name: its name there.
        shape, dtype, chunks, shards: as they were when the source was fitted to the spec.
    """

    def __init__(self, path: str, name: str, opened: Any) -> None:
        self.path, self.name = path, name
        self.shape: tuple[int, ...] = opened.shape
        self.dtype: np.dtype[Any] = opened.dtype
        self.chunks: tuple[int, ...] = opened.chunks
        self.shards: tuple[int, ...] | None = opened.shards
        self._opened = opened

    def __getstate__(self) -> dict[str, Any]:
        return {**vars(self), "_opened": None}

    def read(self, index: Index) -> Array:
        """The undecoded samples of one box: slices, or positions along some dimensions.

        Raises:
            SourceError: a chunk that is truncated or corrupt, by its name; an array that is
                no longer what it was.
        """
        array = self._open()
        try:
            if all(isinstance(part, slice) for part in index):
                return np.asarray(array[index])
            return np.asarray(array.oindex[index])
        except MemoryError:
            raise
        except Exception as error:
            raise SourceError(self._unreadable(array, index, error)) from error

    def _open(self) -> Any:
        if self._opened is None:
            try:
                with without_format_warnings():
                    array = open_array(Path(self.path) / self.name)
            except Exception as error:
                found = f"cannot be opened any more ({told(error)})"
                raise SourceError(self._changed(found)) from error
            if (array.shape, array.dtype) != (self.shape, self.dtype):
                raise SourceError(
                    self._changed(f"was {self.dtype} {self.shape}, is {array.dtype} {array.shape}")
                )
            self._opened = array
        return self._opened

    def _changed(self, found: str) -> Problem:
        return Problem(
            str(Path(self.path) / self.name),
            found,
            "a source that stays as it is while it is read",
            "run again when nothing else writes to the source",
        )

    def _unreadable(self, array: Any, index: Index, error: Exception) -> Problem:
        """Finds which chunk cannot be read, by reading them one by one."""
        bounds = [
            part.indices(size)[:2]
            if isinstance(part, slice)
            else (int(part.min()), int(part.max()) + 1)
            for part, size in zip(index, self.shape, strict=True)
        ]
        unit = array.shards or array.chunks
        ranges = [
            range(low // size, ceil(high / size))
            for (low, high), size in zip(bounds, unit, strict=True)
        ]
        broken = ""
        for place in itertools.product(*ranges):
            box = tuple(
                slice(at * size, (at + 1) * size) for at, size in zip(place, unit, strict=True)
            )
            try:
                array[box]
            except Exception as found:
                broken = f", chunk {array.metadata.encode_chunk_key(place)}"
                error = found
                break
        return Problem(
            f"{Path(self.path) / self.name}{broken}",
            f"cannot be read ({told(error)})",
            "whole chunks, or none (an absent chunk is fill)",
            "restore the chunk from its origin, or delete it to have it read as fill",
        )


@contextmanager
def without_format_warnings() -> Iterator[None]:
    """zarr warns of what it reads all the same: labels of fixed width, codecs of format 2 in 3."""
    with warnings.catch_warnings():
        for what in ("does not have a Zarr V3 specification", "not in the Zarr version 3 spec"):
            warnings.filterwarnings("ignore", message=f".*{what}")
        yield


def told(error: Exception) -> str:
    """An error of a library, for people: on one line, and not too long to read."""
    text = " ".join(str(error).split())
    return f"{type(error).__name__}: {text[:120]}" if text else type(error).__name__
