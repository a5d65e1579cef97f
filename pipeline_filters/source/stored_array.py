"""One array of a Zarr store: opened where it is read, its broken chunks named."""

from __future__ import annotations

import itertools
from math import ceil
from pathlib import Path
from typing import Any

import numpy as np
import zarr
from numpy.typing import NDArray

from pipeline_filters.errors import Problem, SourceError

Array = NDArray[Any]
Index = tuple["slice | NDArray[np.int64]", ...]


class StoredArray:
    """An array by its path; small to send, and opened anew wherever it arrives.

    Attributes:
        path: the group that it lies in.
        name: its name there.
        shape, dtype, chunks: as they were when the source was fitted to the spec.
    """

    def __init__(
        self,
        path: str,
        name: str,
        shape: tuple[int, ...],
        dtype: np.dtype[Any],
        chunks: tuple[int, ...],
        opened: Any,
    ) -> None:
        self.path, self.name = path, name
        self.shape, self.dtype, self.chunks = shape, dtype, chunks
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
                array = zarr.open_array(str(Path(self.path) / self.name), mode="r")
            except Exception as error:
                found = f"cannot be opened any more ({_told(error)})"
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
            (part.start, part.stop)
            if isinstance(part, slice)
            else (int(part.min()), int(part.max()) + 1)
            for part in index
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
            f"cannot be read ({_told(error)})",
            "whole chunks, or none (an absent chunk is fill)",
            "restore the chunk from its origin, or delete it to have it read as fill",
        )


def _told(error: Exception) -> str:
    text = " ".join(str(error).split())
    return f"{type(error).__name__}: {text[:120]}" if text else type(error).__name__
