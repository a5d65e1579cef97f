"""Lazy results as xarray users have them: Datasets with coordinates."""

from __future__ import annotations

from collections.abc import Hashable, Mapping
from typing import Any

import dask.array as da
import numpy as np
import xarray as xr
from numpy.typing import NDArray


def one_result(
    name: str,
    dims: tuple[str, ...],
    values: da.Array,
    attrs: Mapping[str, Any],
    coords: Mapping[str, Any],
) -> xr.Dataset:
    """One result with its coordinates."""
    array = xr.DataArray(values, dims=dims, name=name, attrs=dict(attrs), coords=dict(coords))
    return array.to_dataset()


def as_stamps(stamps_ns: NDArray[np.int64], kind: str, time: str) -> xr.Variable:
    """A time coordinate: datetimes where stamped, seconds where elapsed."""
    if kind == "stamped":
        return xr.Variable(time, stamps_ns.view("M8[ns]"))
    return xr.Variable(time, stamps_ns / 1e9, {"units": "s", "long_name": "elapsed time"})


def joined_results(parts: Mapping[str, xr.Dataset]) -> xr.Dataset | xr.DataTree:
    """All results in one Dataset; a DataTree with a node for each where their axes differ."""
    first = next(iter(parts.values()))
    if all(_same_axes(first, part) for part in parts.values()):
        joined: xr.Dataset = xr.merge(
            list(parts.values()), join="exact", compat="override", combine_attrs="drop"
        )
        return joined
    return xr.DataTree.from_dict(dict(parts))


def _same_axes(one: xr.Dataset, other: xr.Dataset) -> bool:
    def same(name: Hashable) -> bool:
        return name in other.coords and one.coords[name].equals(other.coords[name])

    return (
        one.coords.keys() == other.coords.keys()
        and all(map(same, one.coords))
        and (one.sizes == other.sizes)
    )
