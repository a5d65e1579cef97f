"""Writing whole storage units of a result, and the stamps that go with them."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from itertools import product
from typing import Any

import numpy as np
import zarr
from numpy.typing import NDArray

from pipeline_filters.product.chunk_files import ChunkForm
from pipeline_filters.product.plan import AxisKind
from pipeline_filters.product.refusals import refused_by_the_system

NS_PER_S = 1_000_000_000


@dataclass(frozen=True)
class UnitWriter:
    """Writes one result's units: names and numbers only, so that it may be sent anywhere.

    Attributes:
        path: of the product.
        result: the result's name.
        time: the name of its time coordinate, or None.
        shape, unit: of the array, and of a storage unit in it.
        dtype: of the array.
        time_dim: which dimension is time.
        form, time_form: how the chunks of both lie in files; None where Zarr is to write them.
        token: tells this writer's open arrays from those of another.
    """

    path: str
    result: str
    time: str | None
    axis_kind: AxisKind
    shape: tuple[int, ...]
    unit: tuple[int, ...]
    dtype: str
    time_dim: int
    form: ChunkForm | None
    time_form: ChunkForm | None
    token: str

    def write(self, start: int, stop: int, box: tuple[slice, ...], values: NDArray[Any]) -> None:
        """Writes the results [start, stop) of a box of channels, one unit after the other.

        Args:
            box: one slice per dimension that is not time, in order.
            values: in the result's dimension order and type.

        Raises:
            ValueError: the region is not made of whole units, or the values do not fill it.
            SurroundingsError: the target is full or not writable; units that were there
                before are whole, as they were or as they are to be.
        """
        region = list(box)
        region.insert(self.time_dim, slice(start, stop))
        cuts = [
            _whole_units(part, size, length)
            for part, size, length in zip(region, self.unit, self.shape, strict=True)
        ]
        extent = tuple(part.stop - part.start for part in region)
        if values.shape != extent or values.dtype != np.dtype(self.dtype):
            raise ValueError(
                f"values of {values.dtype}{values.shape} for a region of {self.dtype}{extent}"
            )
        for place in product(*cuts):
            self._write_unit(place, [part.start for part in region], values)

    def _write_unit(self, place: tuple[int, ...], origin: list[int], values: NDArray[Any]) -> None:
        bounds = [
            (index * size, min((index + 1) * size, length))
            for index, size, length in zip(place, self.unit, self.shape, strict=True)
        ]
        within = tuple(
            slice(low - first, high - first)
            for (low, high), first in zip(bounds, origin, strict=True)
        )
        region = tuple(slice(low, high) for low, high in bounds)
        self._put(self.result, self.form, place, region, values[within])

    def write_stamps(self, start: int, stop: int, stamps_ns: NDArray[np.int64]) -> None:
        """Writes the time coordinate of the results [start, stop): whole units along time.

        Args:
            stamps_ns: (stop - start,) int64 ns since 1970, or since zero for an elapsed axis.

        Raises:
            ValueError: the run is not made of whole units, or there is no time coordinate.
            SurroundingsError: the target is full or not writable.
        """
        if self.time is None:
            raise ValueError(f"result {self.result} has no time coordinate")
        length, size = self.shape[self.time_dim], self.unit[self.time_dim]
        units = _whole_units(slice(start, stop), size, length)
        if stamps_ns.shape != (stop - start,) or stamps_ns.dtype != np.int64:
            raise ValueError(
                f"stamps of {stamps_ns.dtype}{stamps_ns.shape} for {stop - start} results"
            )
        stamps = stamps_ns if self.axis_kind == "stamped" else seconds(stamps_ns)
        for unit in units:
            low, high = unit * size, min((unit + 1) * size, length)
            values = stamps[low - start : high - start]
            self._put(self.time, self.time_form, (unit,), (slice(low, high),), values)

    def _put(
        self,
        name: str,
        form: ChunkForm | None,
        place: tuple[int, ...],
        region: tuple[slice, ...],
        values: NDArray[Any],
    ) -> None:
        folder = f"{self.path}/{self.result}/{name}"
        with refused_by_the_system(self.path):
            if form is None:
                _open_array(folder, self.token)[region] = values
            else:
                form.write(folder, place, values)


@lru_cache(maxsize=64)
def _open_array(folder: str, token: str) -> Any:  # noqa: ARG001
    # The token is of one writer: a store that was made anew at the same path is opened anew.
    # All-missing units are written, so that they differ from absent ones.
    return zarr.open_array(folder, mode="r+").with_config({"write_empty_chunks": True})


def seconds(stamps_ns: NDArray[np.int64]) -> NDArray[np.float64]:
    """Nanoseconds as float64 seconds: the nearest number below 2^53 ns, some 104 days.

    Above, whole seconds and the rest are taken apart, as the integer itself would be rounded.
    """
    rest = np.fmod(stamps_ns, NS_PER_S)
    apart = (stamps_ns - rest) // NS_PER_S + rest / NS_PER_S
    exact = np.abs(stamps_ns) < 2**53
    return np.where(exact, stamps_ns / NS_PER_S, apart)


def _whole_units(part: slice, size: int, length: int) -> range:
    """The units of a dimension that a slice is made of; refuses what is not whole units."""
    whole = (
        part.step in (None, 1)
        and part.start is not None
        and part.stop is not None
        and 0 <= part.start < part.stop <= length
        and part.start % size == 0
        and (part.stop % size == 0 or part.stop == length)
    )
    if not whole:
        raise ValueError(f"{part} is not made of whole units of {size} within {length}")
    return range(part.start // size, -(-part.stop // size))
