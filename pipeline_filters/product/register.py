"""The register: which storage units of a result are done, and what went in and came out.

Four Zarr arrays over the grid of storage units: ``state`` (1 is done), ``input_digest`` and
``output_digest`` (16 bytes a unit) and ``surroundings`` (an index into the attribute of that
name: versions and processor class). Only the coordinating process writes them, after the data
that they speak of, and ``state`` last: whatever was lost in a crash, a unit that reads as
done is done. This holds for a process that is killed; a machine that loses power may lose
data that the register already speaks of, which a comparison with the output digests shows.

Growth: the grid is cut along time, and the arrays' chunks do not depend on its length, so a
longer source only resizes them; units keep their places. A last unit that was not full is
marked again with its new digests once it has been rewritten.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import zarr
from numpy.typing import NDArray
from zarr.codecs import ZstdCodec

from pipeline_filters.errors import ProductError
from pipeline_filters.product.chunk_files import ChunkForm, plain_form
from pipeline_filters.product.digest import DIGEST_BYTES
from pipeline_filters.product.nodes import change_attributes, read_node, refresh_copy
from pipeline_filters.product.refusals import damaged, refused_by_the_system

# Order of writing: the state comes last.
ARRAYS = ("input_digest", "output_digest", "surroundings", "state")
DONE = 1

# Units whose entries lie in one file of the register.
CHUNK_UNITS = 4096

Unit = tuple[tuple[int, ...], bytes, bytes]


def grid_chunks(grid: Sequence[int], time_dim: int) -> tuple[int, ...]:
    """How the register's arrays are cut: independent of the number of units along time."""
    sizes = [1] * len(grid)
    left = CHUNK_UNITS
    for dim in reversed(range(len(grid))):
        if dim != time_dim:
            sizes[dim] = max(1, min(grid[dim], left))
            left //= sizes[dim]
    sizes[time_dim] = max(1, left)
    return tuple(sizes)


def create_register(group: Any, grid: Sequence[int], dims: Sequence[str], time_dim: int) -> None:
    """Makes the register's arrays in an empty group; their chunks have the plain form."""
    chunks = grid_chunks(grid, time_dim)
    names = [f"{dim}_unit" for dim in dims]
    for name in ARRAYS:
        extra = (DIGEST_BYTES,) if name.endswith("digest") else ()
        group.create_array(
            name,
            shape=(*grid, *extra),
            chunks=(*chunks, *extra),
            dtype="u2" if name == "surroundings" else "u1",
            fill_value=0,
            compressors=ZstdCodec(),
            dimension_names=[*names, "digest_byte"] if extra else names,
        )


@dataclass
class _Block:
    """The entries of one file of the register that are not all on disk yet."""

    entries: dict[str, NDArray[Any]]
    dirty: bool = False


class Register:
    """The register of one result; for the coordinating process alone.

    Attributes:
        grid: the number of storage units along each dimension of the result.
    """

    def __init__(self, path: str | Path, result: str, surroundings: dict[str, Any]) -> None:
        """Opens the register at the group ``path``.

        Raises:
            ProductError: it is damaged.
        """
        self._path = Path(path)
        self._result = result
        self._surroundings = surroundings
        self._index: int | None = None
        self._blocks: dict[tuple[int, ...], _Block] = {}
        try:
            self._arrays = {
                name: zarr.open_array(str(self._path / name), mode="r") for name in ARRAYS
            }
            self._forms = {name: self._form(name) for name in ARRAYS}
        except (OSError, KeyError, ValueError) as error:
            raise self._damaged(error) from error
        state = self._arrays["state"]
        self.grid: tuple[int, ...] = tuple(state.shape)
        self._chunks: tuple[int, ...] = tuple(state.chunks)

    def done(self) -> NDArray[np.bool_]:
        """Which units are done, marks that are not flushed yet included: bool, of the grid."""
        state: NDArray[np.bool_] = self._read("state") == DONE
        for place, block in self._blocks.items():
            state[self._region(place)] = block.entries["state"] == DONE
        return state

    def digests(self, unit: tuple[int, ...]) -> tuple[bytes, bytes]:
        """The digests of what went into a unit and what came out; zeros where not done."""
        block = self._block(self._place(unit))
        within = tuple(i % c for i, c in zip(unit, self._chunks, strict=True))
        one, two = (block.entries[name][within] for name in ARRAYS[:2])
        return one.tobytes(), two.tobytes()

    def mark(self, units: Iterable[Unit]) -> None:
        """Takes units as done: place in the grid, digests of input and output. In memory.

        Raises:
            ValueError: a unit outside the grid, or a digest of another length.
        """
        index = self._surroundings_index()
        for unit, given, made in units:
            if len(unit) != len(self.grid) or not all(
                0 <= i < n for i, n in zip(unit, self.grid, strict=True)
            ):
                raise ValueError(f"unit {unit} lies outside the grid {self.grid}")
            if len(given) != DIGEST_BYTES or len(made) != DIGEST_BYTES:
                raise ValueError(f"a digest has {DIGEST_BYTES} bytes")
            block = self._block(self._place(unit))
            within = tuple(i % c for i, c in zip(unit, self._chunks, strict=True))
            block.entries["input_digest"][within] = np.frombuffer(given, np.uint8)
            block.entries["output_digest"][within] = np.frombuffer(made, np.uint8)
            block.entries["surroundings"][within] = index
            block.entries["state"][within] = DONE
            block.dirty = True

    def flush(self) -> None:
        """Writes what was marked; the state of each unit after all else about it.

        Raises:
            SurroundingsError: the target is full or not writable; what was marked is kept, so
                that flushing may be tried again.
        """
        with refused_by_the_system(self._path):
            for place, block in list(self._blocks.items()):
                if block.dirty:
                    for name in ARRAYS:
                        self._write(name, place, block.entries[name])
                    block.dirty = False
                if (block.entries["state"] == DONE).all():
                    del self._blocks[place]

    def mixture(self) -> list[dict[str, Any]]:
        """Under which surroundings the done units were made; more than one is a mixture.

        Returns:
            For each: ``units``, how many, and ``surroundings``; most units first.
        """
        done = self.done()
        indexes = self._read("surroundings")
        for place, block in self._blocks.items():
            indexes[self._region(place)] = block.entries["surroundings"]
        found, counts = np.unique(indexes[done], return_counts=True)
        known = self._known()
        parts = [
            {"units": int(count), "surroundings": known[int(index)]}
            for index, count in zip(found, counts, strict=True)
        ]
        return sorted(parts, key=lambda part: -part["units"])

    def _place(self, unit: tuple[int, ...]) -> tuple[int, ...]:
        return tuple(i // c for i, c in zip(unit, self._chunks, strict=True))

    def _region(self, place: tuple[int, ...]) -> tuple[slice, ...]:
        return tuple(
            slice(i * c, min((i + 1) * c, n))
            for i, c, n in zip(place, self._chunks, self.grid, strict=True)
        )

    def _block(self, place: tuple[int, ...]) -> _Block:
        block = self._blocks.get(place)
        if block is None:
            region = self._region(place)
            block = _Block({name: self._read(name, region) for name in ARRAYS})
            self._blocks[place] = block
        return block

    def _form(self, name: str) -> ChunkForm:
        form = plain_form(read_node(self._path / name), fill=0)
        if form is None:
            raise ValueError(f"{name} is not laid down as registers are")
        return form

    def _write(self, name: str, place: tuple[int, ...], entries: NDArray[Any]) -> None:
        inner = (*place, 0) if name.endswith("digest") else place
        self._forms[name].write(str(self._path / name), inner, entries)

    def _read(self, name: str, region: tuple[slice, ...] | None = None) -> NDArray[Any]:
        try:
            return np.array(self._arrays[name][... if region is None else region])
        except Exception as error:
            raise self._damaged(error) from error

    def _known(self) -> list[Any]:
        try:
            return list(read_node(self._path)["attributes"]["surroundings"])
        except (OSError, KeyError, ValueError) as error:
            raise self._damaged(error) from error

    def _surroundings_index(self) -> int:
        """The place of this run's surroundings in the list, which they are added to."""
        if self._index is None:
            known = self._known()
            if self._surroundings not in known:
                known.append(self._surroundings)
                with refused_by_the_system(self._path):
                    change_attributes(self._path, {"surroundings": known})
                    refresh_copy(self._path.parent.parent)
            self._index = known.index(self._surroundings)
        return self._index

    def _damaged(self, error: Exception) -> ProductError:
        return damaged(self._path, f"the register of result {self._result}", error)
