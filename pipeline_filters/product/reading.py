"""Opening a product for reading: the settled part only."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr
import zarr
from numpy.typing import NDArray

from pipeline_filters.errors import Problem, ProductError
from pipeline_filters.product.inspection import inspect
from pipeline_filters.product.places import REGISTER
from pipeline_filters.product.plan import ResultState
from pipeline_filters.product.refusals import damaged
from pipeline_filters.product.register import DONE


def open_product(path: str | Path) -> xr.Dataset | xr.DataTree:
    """The settled part of a product, lazily.

    Settled is what the register has as done without a gap from the start, over all channels.

    Returns:
        A Dataset where there is one result, or where all results lie on the same axis (then as
        far as all of them are settled); else a DataTree with one node a result.

    Raises:
        ProductError: there is no product, or it is damaged, or something else lies there.
    """
    root = Path(path)
    state = inspect(root)
    if state.kind == "absent":
        raise ProductError(
            Problem(str(root), "there is no product", "a product of this program", "make one first")
        )
    parts = {name: _settled_part(root, result) for name, result in state.results.items()}
    if len(parts) == 1:
        return next(iter(parts.values()))
    joined = _joined(list(state.results.values()), parts)
    return xr.DataTree.from_dict(parts) if joined is None else joined


def settled_samples(root: Path, result: ResultState) -> int:
    """Samples along time that are done without a gap from the start, over all channels.

    Raises:
        ProductError: the register cannot be read.
    """
    try:
        entry = zarr.open_array(str(root / REGISTER / result.name / "state"), mode="r")
        done: NDArray[np.bool_] = np.asarray(entry[...]) == DONE
    except Exception as error:
        where = root / REGISTER / result.name
        raise damaged(where, f"the register of result {result.name}", error) from error
    others = tuple(dim for dim in range(done.ndim) if dim != result.time_dim)
    whole = done.all(axis=others)
    units = whole.size if whole.all() else int(np.argmin(whole))
    return min(units * result.unit[result.time_dim], result.shape[result.time_dim])


def _settled_part(root: Path, result: ResultState) -> xr.Dataset:
    samples = settled_samples(root, result)
    try:
        whole: xr.Dataset = xr.open_zarr(
            str(root), group=result.name, chunks={}, consolidated=False
        )
    except Exception as error:
        raise damaged(root / result.name, f"result {result.name}", error) from error
    return whole.isel({result.dims[result.time_dim]: slice(0, samples)})


def _joined(results: list[ResultState], parts: dict[str, xr.Dataset]) -> xr.Dataset | None:
    """All results in one Dataset, or None where their axes differ."""
    first = results[0]
    dim = first.dims[first.time_dim]
    axis = (dim, first.shape[first.time_dim], first.axis_kind)
    if any((r.dims[r.time_dim], r.shape[r.time_dim], r.axis_kind) != axis for r in results):
        return None
    length = min(part.sizes[dim] for part in parts.values())
    cut: list[Any] = [part.isel({dim: slice(0, length)}) for part in parts.values()]
    try:
        joined: xr.Dataset = xr.merge(
            cut, join="exact", compat="equals", combine_attrs="drop_conflicts"
        )
    except ValueError:
        return None
    return joined
