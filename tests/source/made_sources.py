"""Invented recordings of a gravel-listening plate, as stores and as stamps in memory."""

from __future__ import annotations

import warnings
from fractions import Fraction

import numpy as np
import zarr

from pipeline_filters.source.cf_time import TimeUnits
from pipeline_filters.spec.model import Channels, Missing, Signal

RATE_HZ = Fraction(1000)
PLATE = Signal("plate", "velocity", "time", RATE_HZ, "1 kHz")
MS = "milliseconds since 2026-03-01 00:00:00"
START_NS = 1_772_323_200_000_000_000  # 2026-03-01T00:00:00Z, by date -d @1772323200


def kept(*labels: str | int | float) -> Channels:
    return Channels("geophone", labels)


def spread() -> Missing:
    return Missing("spread")


class MadeStamps:
    """Stamps in memory, read as a store's are; remembers the largest read."""

    name = "time"

    def __init__(self, raw, units: TimeUnits, chunk_samples: int) -> None:
        self.raw = np.asarray(raw)
        self.units = units
        self.chunk_samples = chunk_samples
        self.largest_read = 0

    def read(self, start, stop):
        assert 0 <= start < stop <= self.raw.size
        self.largest_read = max(self.largest_read, stop - start)
        return self.raw[start:stop]

    def resolution_ns(self, step_ns):
        return self.units.resolution_ns(self.raw[[0, -1]], step_ns)


def geophones(count: int) -> list[str]:
    return [f"g{n:02d}" for n in range(1, count + 1)]


def make_store(
    path,
    values,
    stamps_ms=None,
    *,
    dims=("time", "geophone"),
    chunks=None,
    zarr_format=3,
    units=MS,
    labels=True,
    compressors="auto",
    shards=None,
    fill_value=None,
    time_attrs=None,
    **attrs,
):
    """A store with one variable, its stamps (int64 or as given) and its labels.

    ``labels`` may be the labels themselves, of any type, for the dimension geophone.
    """
    group = zarr.open_group(str(path), mode="w", zarr_format=zarr_format)

    def add(name, data, names, its_chunks, its_attrs, fill=None, its_shards=None):
        data = np.asarray(data)
        naming = {"dimension_names": names} if zarr_format == 3 else {}
        with warnings.catch_warnings():
            # zarr warns where it writes texts of fixed width in format 3
            warnings.filterwarnings("ignore", message=".*does not have a Zarr V3 specification.*")
            array = group.create_array(
                name,
                shape=data.shape,
                dtype=data.dtype,
                chunks=its_chunks or tuple(max(1, n) for n in data.shape),
                shards=its_shards,
                compressors=compressors,
                fill_value=fill,
                **naming,
            )
            array[...] = data
            its_attrs = dict(its_attrs)
            if zarr_format == 2:
                its_attrs["_ARRAY_DIMENSIONS"] = list(names)
            array.attrs.update(its_attrs)

    values = np.asarray(values)
    add("velocity", values, dims, chunks, attrs, fill_value, shards)
    if stamps_ms is not None:
        its_attrs = {**({"units": units} if units else {}), **(time_attrs or {})}
        add("time", stamps_ms, ("time",), (64,), its_attrs)
    if "geophone" in dims and labels is not False:
        if labels is True:
            labels = np.array(geophones(values.shape[dims.index("geophone")]), "S3")
        add("geophone", labels, ("geophone",), None, {})
    return str(path)
