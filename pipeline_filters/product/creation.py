"""Making a product and its results, so that a crash at any step leaves what can be finished.

The lock's file comes first, so that one run at a time makes anything. A result is made in
memory and laid down file by file, its mark first: Zarr, left to write by itself, goes on with
other files in the background when one of them fails. A result counts only once the root lists
it, which is the last step; what is not listed is taken away and made anew.
"""

from __future__ import annotations

import os
import shutil
from collections.abc import Iterable, Mapping
from datetime import UTC, datetime
from math import ceil, isfinite
from pathlib import Path
from typing import Any

import numpy as np
import zarr
from zarr.storage import MemoryStore

from pipeline_filters.product.files import write_file
from pipeline_filters.product.nodes import new_group, read_node, with_copy_of_all, write_node
from pipeline_filters.product.places import (
    COEFFICIENTS,
    FORMAT,
    LOCK,
    MARK,
    PARTIAL,
    REGISTER,
    RESERVED,
    result_folders,
)
from pipeline_filters.product.plan import AxisKind, Coordinate, Json, ResultPlan
from pipeline_filters.product.register import create_register


def create_root(root: Path) -> None:
    """Makes the root's mark and the groups of all results, where they are not yet."""
    if not (root / "zarr.json").exists():
        new_group(root, {MARK: {"format": FORMAT}})
    for name in RESERVED:
        if not (root / name / "zarr.json").exists():
            new_group(root / name, {})
    if not (root / REGISTER / LOCK / "zarr.json").exists():
        files: dict[str, Any] = {}
        zarr.create_array(
            MemoryStore(files),
            name=LOCK,
            shape=(),
            dtype="u1",
            attributes={"purpose": "its folder has the file that a run holds"},
        )
        _lay(root / REGISTER, {key: files[key] for key in files if key.startswith(LOCK)})


def list_results(
    root: Path,
    *,
    spec_text: str,
    source_identity: Mapping[str, Json],
    surroundings: Mapping[str, Json],
    digests: Mapping[str, str],
) -> None:
    """Writes the root's mark in one step: from here on the results in it count."""
    node = read_node(root)
    node["attributes"][MARK] = {
        "surroundings": surroundings,
        **node["attributes"][MARK],
        "spec": spec_text,
        "source": dict(source_identity),
        "results": dict(digests),
    }
    write_node(root, with_copy_of_all(root, node))


def unlist_results(root: Path, results: Iterable[str]) -> None:
    """Takes results out of the root's mark in one step: from here on they do not count."""
    node = read_node(root)
    gone = set(results)
    listed = node["attributes"][MARK]["results"]
    kept = {name: digest for name, digest in listed.items() if name not in gone}
    node["attributes"][MARK]["results"] = kept
    write_node(root, with_copy_of_all(root, node))


def clear_unlisted(root: Path, result: str) -> None:
    """Takes away what a creation that did not end has left of a result."""
    for folder in result_folders(root, result):
        if folder.exists():
            shutil.rmtree(folder)


def clear_partial_files(root: Path, growing: Iterable[str]) -> None:
    """Takes away files that a killed writer had not given their names yet.

    Args:
        growing: the results whose folders are searched as deep as they go.
    """
    for folder in (root, root / REGISTER, root / REGISTER / LOCK, root / COEFFICIENTS):
        _clear_partial([folder / name for name in os.listdir(folder)])
    for result in growing:
        for top in result_folders(root, result):
            for folder_name, _, names in os.walk(top):
                _clear_partial([Path(folder_name, name) for name in names if "partial" in name])


def _clear_partial(files: Iterable[Path]) -> None:
    for file in files:
        if PARTIAL.search(file.name):
            file.unlink(missing_ok=True)


def create_result(root: Path, plan: ResultPlan) -> None:
    """Makes a result's group, coefficients and register; none of them may be there."""
    files: dict[str, Any] = {}
    store = MemoryStore(files)
    group = zarr.create_group(store, path=plan.name, attributes=_group_attributes(plan))
    group.create_array(
        plan.name,
        shape=plan.shape,
        dtype=plan.dtype,
        chunks=plan.chunks,
        shards=plan.shards,
        fill_value=np.nan,
        dimension_names=plan.dims,
        attributes=_array_attributes(plan),
    )
    for name, coordinate in plan.coords.items():
        _create_coordinate(group, name, coordinate)
    _create_time(group, plan)
    kept = zarr.create_group(store, path=f"{COEFFICIENTS}/{plan.name}")
    for name, values in plan.coefficients.items():
        dims = tuple(f"{name}_{index}" for index in range(values.ndim))
        _create_coordinate(kept, name, (dims, values, {}))
    register = zarr.create_group(
        store, path=f"{REGISTER}/{plan.name}", attributes={"surroundings": []}
    )
    grid = [ceil(n / u) for n, u in zip(plan.shape, plan.unit, strict=True)]
    create_register(register, grid, plan.dims, plan.time_dim)
    tops = (plan.name, f"{COEFFICIENTS}/{plan.name}", f"{REGISTER}/{plan.name}")
    for top in tops:
        _lay(root, {key: files[key] for key in files if key.startswith(f"{top}/")})


def _lay(root: Path, files: Mapping[str, Any]) -> None:
    """Writes files one by one, those of groups and arrays before those in them."""
    for key in sorted(files, key=lambda key: (key.count("/"), key)):
        write_file(str(root / key), files[key].to_bytes())


def time_fill(kind: AxisKind) -> float:
    """What stamps that are not written yet read as: missing ones, not 1970."""
    return int(np.iinfo(np.int64).min) if kind == "stamped" else np.nan


def history_line(text: str) -> str:
    """A line for the history attribute, with the time of day in UTC."""
    return f"{datetime.now(UTC):%Y-%m-%dT%H:%M:%SZ} pipeline-filters: {text}"


def _group_attributes(plan: ResultPlan) -> dict[str, Json]:
    return {
        MARK: {
            "digest": plan.digest,
            "dims": list(plan.dims),
            "time_dim": plan.time_dim,
            "axis_kind": plan.axis_kind,
            "facts": plain(plan.facts),
        },
        "state": "growing",
        "history": history_line(f"made room for result {plan.name}, digest {plan.digest}"),
    }


def _array_attributes(plan: ResultPlan) -> dict[str, Json]:
    # What is neither named here nor after a dimension would open as one more result.
    others = " ".join(name for name in plan.coords if name not in plan.dims)
    attributes = {**plain(plan.attrs), "coordinates": others}
    if not others:
        del attributes["coordinates"]
    return attributes


def _create_coordinate(group: Any, name: str, coordinate: Coordinate) -> None:
    dims, values, attrs = coordinate
    held = np.asarray(values)
    # Text of fixed width has no form in Zarr v3 that everyone reads; text of any width has.
    text = held.dtype.kind in "OUST"
    array = group.create_array(
        name,
        shape=held.shape,
        dtype=str if text else held.dtype,
        chunks=tuple(max(1, n) for n in held.shape),
        dimension_names=dims,
        attributes=plain(attrs),
        config={"write_empty_chunks": True},
    )
    array[...] = held.astype("T") if text else held


def _create_time(group: Any, plan: ResultPlan) -> None:
    if plan.axis_kind == "counted":
        return
    stamped = plan.axis_kind == "stamped"
    attributes: dict[str, Json] = {"standard_name": "time", "axis": "T"}
    if stamped:
        attributes["units"] = "nanoseconds since 1970-01-01"
        attributes["calendar"] = "proleptic_gregorian"
    else:
        attributes = {"long_name": "elapsed time", "units": "s"}
    group.create_array(
        plan.dims[plan.time_dim],
        shape=(plan.shape[plan.time_dim],),
        dtype="i8" if stamped else "f8",
        chunks=(plan.unit[plan.time_dim],),
        fill_value=time_fill(plan.axis_kind),
        dimension_names=[plan.dims[plan.time_dim]],
        attributes=attributes,
    )


def plain(value: Any) -> Any:
    """A value as JSON has it: numpy's made plain, numbers that JSON has no word for as text."""
    if isinstance(value, Mapping):
        return {str(key): plain(one) for key, one in value.items()}
    if isinstance(value, list | tuple):
        return [plain(one) for one in value]
    if isinstance(value, np.ndarray | np.generic):
        return plain(value.tolist())
    if isinstance(value, float) and not isfinite(value):
        return str(value)
    return value
