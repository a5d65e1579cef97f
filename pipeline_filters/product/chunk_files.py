"""The files of an array's chunks, written without Zarr's machinery where their form is plain.

Zarr hands every chunk through an event loop and threads: half a millisecond each, five times
what a small chunk itself takes, and no gain where workers are processes. A chunk in Zarr's
default form is its bytes, little-endian, in C order, filled up at the array's ends, and
compressed by Zstandard; a test compares the files with those that Zarr makes.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np
from numcodecs.zstd import Zstd  # type: ignore[import-untyped]
from numpy.typing import NDArray

from pipeline_filters.product.files import write_file


@dataclass(frozen=True)
class ChunkForm:
    """How the chunks of an array lie in files.

    Attributes:
        shape: of a chunk.
        dtype: of the array.
        level: of the compression.
        fill: what a chunk is filled up with past the array's ends.
    """

    shape: tuple[int, ...]
    dtype: str
    level: int
    fill: float

    def write(self, folder: str, place: Sequence[int], values: NDArray[Any]) -> None:
        """Writes one chunk, whole or cut off by the array's ends.

        Where the values fill it and lie in C order nothing is copied; the compressed bytes
        are the only memory that is taken.

        Args:
            folder: of the array.
            place: of the chunk in the grid.
            values: of the array's type.

        Raises:
            OSError: what was there before is untouched then.
        """
        little = np.dtype(self.dtype).newbyteorder("<")
        if values.shape == self.shape:
            held = np.ascontiguousarray(values, little)
        else:
            held = np.full(self.shape, self.fill, little)
            held[tuple(slice(0, n) for n in values.shape)] = values
        name = "/".join(map(str, ("c", *place)))
        write_file(f"{folder}/{name}", _codec(self.level).encode(held))


def plain_form(node: dict[str, Any], fill: float) -> ChunkForm | None:
    """The form of an array's chunks if it is the plain one, or None, from its metadata."""
    names = [codec["name"] for codec in node["codecs"]]
    keys = node["chunk_key_encoding"]
    compression = node["codecs"][-1].get("configuration", {})
    plain = (
        names == ["bytes", "zstd"]
        and node["codecs"][0].get("configuration", {}).get("endian", "little") == "little"
        and not compression.get("checksum", False)
        and keys["name"] == "default"
        and keys.get("configuration", {}).get("separator", "/") == "/"
    )
    if not plain:
        return None
    shape = tuple(node["chunk_grid"]["configuration"]["chunk_shape"])
    return ChunkForm(shape, node["data_type"], int(compression.get("level", 0)), fill)


@lru_cache
def _codec(level: int) -> Any:
    return Zstd(level)
