"""A source in an xarray Dataset: the arrays themselves, for use inside the user's own graph."""

from __future__ import annotations

from collections.abc import Hashable, Mapping
from dataclasses import dataclass, replace
from fractions import Fraction
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from pipeline_filters.errors import Problem, SourceError
from pipeline_filters.source.axis import Axis
from pipeline_filters.source.axis_scan import READ_SAMPLES
from pipeline_filters.source.cf_attributes import MARKERS
from pipeline_filters.source.cf_time import TimeUnitError, TimeUnits
from pipeline_filters.source.fitting import Fit, fit_all
from pipeline_filters.source.offers import Offer
from pipeline_filters.source.readers import SignalReader, Source
from pipeline_filters.spec.findings import shortened
from pipeline_filters.spec.model import Signal

__all__ = ["DatasetReader", "DatasetStamps", "open_dataset_source"]

Array = NDArray[Any]

_WHERE = "dataset"
_PACKING = ("scale_factor", "add_offset")
_RANGE = ("valid_min", "valid_max", "valid_range")


class DatasetStamps:
    """A time coordinate of a Dataset."""

    def __init__(self, variable: xr.Variable, name: str, units: TimeUnits) -> None:
        self.variable = variable
        self.name = name
        self.units = units
        chunks = variable.chunks
        self.chunk_samples = max(chunks[0]) if chunks else READ_SAMPLES

    def read(self, start: int, stop: int) -> Array:
        """Raw stamps of samples [start, stop); datetimes where xarray has decoded them."""
        return _loaded(self.variable[start:stop], f"coordinate {self.name}", start, stop)

    def resolution_ns(self, step_ns: Fraction) -> Fraction:
        """How coarse the stamps are, beside a step of ``step_ns``: as they were stored.

        xarray turns stamps into datetimes, finer than what they came from; the encoding tells.
        """
        last = self.variable.shape[0] - 1
        ends = np.concatenate([self.read(0, 1), self.read(last, last + 1)])
        own = self.units.resolution_ns(ends, step_ns)
        stored, dtype = self.variable.encoding.get("units"), self.variable.encoding.get("dtype")
        if ends.dtype.kind not in "mM" or not isinstance(stored, str) or dtype is None:
            return own
        try:
            calendar = str(self.variable.encoding.get("calendar", "standard"))
            units = TimeUnits.parse(stored, calendar)
            counts = (self.units.to_ns(ends) - float(units.epoch_ns)) / units.unit_ns
        except TimeUnitError:
            return own
        return max(own, units.resolution_ns(counts.astype(dtype), step_ns))


@dataclass(frozen=True, eq=False)
class DatasetReader(SignalReader):
    """One signal of a Dataset.

    Attributes:
        variable: of the kept channels; its data is loaded when it is asked for.
    """

    variable: xr.Variable

    @property
    def array(self) -> Any:
        """All undecoded samples of the kept channels: the dask array, or a numpy array."""
        return self.variable.data

    def read(self, start: int, stop: int, box: tuple[slice, ...]) -> Array:
        """Undecoded samples [start, stop) of a box of kept channels, in the source's order.

        Raises:
            SourceError: samples that cannot be read, by their range.
        """
        index = list(box)
        index.insert(self.time_dim, slice(start, stop))
        where = f"variable {self.signal.variable}"
        return _loaded(self.variable[tuple(index)], where, start, stop)


def without_samples(reader: DatasetReader, axis: Axis) -> DatasetReader:
    """A reader that decodes, screens and names samples, but holds none: small to send."""
    stamps = None if axis.kind == "counted" else AxisStamps(axis, TimeUnits(axis.kind, 1, 0))
    return replace(reader, variable=xr.Variable((), 0), stamps=stamps, coords={})


@dataclass(frozen=True, eq=False)
class AxisStamps:
    """Stamps as a checked axis has them, in nanoseconds."""

    axis: Axis
    units: TimeUnits
    name: str = "time"
    chunk_samples: int = READ_SAMPLES

    def read(self, start: int, stop: int) -> Array:
        """Stamps of samples [start, stop)."""
        return self.axis.stamps_at(start, stop, 0)

    def resolution_ns(self, step_ns: Fraction) -> Fraction:
        """They are exact."""
        del step_ns
        return Fraction(0)


class _Dataset:
    """What a Dataset offers."""

    where = _WHERE

    def __init__(self, dataset: xr.Dataset, signals: Mapping[str, Signal]) -> None:
        self._dataset = dataset
        self._samples = {signal.variable for signal in signals.values()}
        self._times = {signal.time for signal in signals.values()}

    def find(self, name: str) -> Offer | None:
        if name not in self._dataset.variables:
            return None
        variable = self._dataset.variables[name]
        if name in self._samples:
            _refuse_unpacked(name, variable)
        elif variable.dtype.kind in "mM" and name not in self._times:
            # A coordinate that xarray has decoded: as it was stored.
            variable = xr.conventions.encode_cf_variable(variable, name=name)
        return Offer(
            name,
            tuple(str(dim) for dim in variable.dims),
            variable.shape,
            variable.dtype,
            _attributes(variable),
            lambda: _loaded(variable, f"coordinate {name}"),
            variable,
        )

    def names(self) -> list[str]:
        return sorted(str(name) for name in self._dataset.variables)

    def shared_coordinates(self) -> str:
        return " ".join(str(name) for name in self._dataset.coords)


def _loaded(
    variable: xr.Variable, where: str, start: int | None = None, stop: int | None = None
) -> Array:
    """Values, computed where they are lazy; what goes wrong there is refused by its place."""
    try:
        return np.asarray(variable.values)
    except MemoryError:
        raise
    except Exception as error:
        text = shortened(f"{type(error).__name__}: {error}", 140)
        raise SourceError(
            Problem(
                f"{_WHERE}, {where}" + ("" if start is None else f", samples {start} to {stop}"),
                f"cannot be read ({text})",
                "values that can be computed",
                "mend what the dataset was opened from, or how it is computed",
            )
        ) from error


def _attributes(variable: xr.Variable) -> dict[str, Any]:
    """The attributes in plain values, without the fill value 0 of Zarr format 2.

    xarray shows every fill value of that format as _FillValue; 0 is what stores without CF have,
    and no marker. Only format 3 has a serializer and, beside it, a fill value in its encoding.
    """
    attrs = {
        str(key): value.tolist() if isinstance(value, (np.generic, np.ndarray)) else value
        for key, value in variable.attrs.items()
    }
    encoding = variable.encoding
    format_2 = "compressors" in encoding and not {"serializer", "fill_value"} & encoding.keys()
    if format_2 and attrs.get("_FillValue") == 0:
        del attrs["_FillValue"]
    return attrs


def _refuse_unpacked(name: str, variable: xr.Variable) -> None:
    """Refuses values that xarray has formed from others, with its own arithmetic."""
    encoding: Mapping[Hashable, Any] = variable.encoding
    stored = encoding.get("dtype")
    was_integer = stored is not None and np.dtype(stored).kind in "iu"
    telling = [key for key in _PACKING if key in encoding]
    if was_integer and variable.dtype.kind == "f":
        telling += [key for key in (*MARKERS, *_RANGE) if key in {*encoding, *variable.attrs}]
    if telling:
        raise SourceError(
            Problem(
                f"{_WHERE}, variable {name}",
                f"values that xarray has decoded ({', '.join(telling)})",
                "samples as they are stored: they are decoded here, in one way",
                "open the source with mask_and_scale=False",
            )
        )


def open_dataset_source(dataset: xr.Dataset, signals: Mapping[str, Signal]) -> Source:
    """Fits a Dataset to a spec's signals; nothing is read but coordinates.

    Args:
        dataset: with samples as they are stored (``mask_and_scale=False``), or with floats
            that need no scaling. Data given as dask arrays stays lazy.

    Raises:
        SourceError: with every problem of every signal.
    """
    fits = fit_all(_Dataset(dataset, signals), signals)
    return Source(_WHERE, {name: _reader(fit) for name, fit in fits.items()})


def _reader(fit: Fit) -> DatasetReader:
    variable: xr.Variable = fit.offer.array
    kept = {
        dim: list(at)
        for dim, at in zip(
            (dim for place, dim in enumerate(fit.dims) if place != fit.time_dim),
            fit.keep,
            strict=True,
        )
        if at is not None
    }
    if kept:
        variable = variable.isel(kept)
    stamps = None
    if fit.time_offer is not None and fit.time_units is not None:
        stamps = DatasetStamps(fit.time_offer.array, fit.time_offer.name, fit.time_units)
    return DatasetReader(
        **fit.reader_facts(),
        stamps=stamps,
        chunks=tuple(map(max, variable.chunks)) if variable.chunks else variable.shape,
        shards=None,
        variable=variable,
    )
