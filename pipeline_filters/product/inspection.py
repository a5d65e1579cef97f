"""What lies at a product's path; looking never writes."""

from __future__ import annotations

import json
from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any

import zarr

from pipeline_filters.errors import Problem, ProductError
from pipeline_filters.product.nodes import read_node
from pipeline_filters.product.places import (
    FORMAT,
    MARK,
    PARTIAL,
    REGISTER,
    lock_file,
    result_folders,
)
from pipeline_filters.product.plan import ProductState, ResultState
from pipeline_filters.product.refusals import refused_by_the_system
from pipeline_filters.product.register import ARRAYS

_REMEDY = "name another path, or take away by hand what lies there"


def inspect(path: str | Path) -> ProductState:
    """What lies at ``path``: nothing yet, or a product of this program.

    Raises:
        ProductError: something else lies there, or a product that is damaged.
        SurroundingsError: looking there is not permitted.
    """
    with refused_by_the_system(path, "read"):
        return _inspected(Path(path))


def _inspected(root: Path) -> ProductState:
    if not root.exists():
        return ProductState("absent")
    if not root.is_dir():
        raise _refusal(root, "a file lies there, not a product")
    if _only_begun(root):
        return ProductState("absent")
    mark, nodes = _root_mark(root)
    listed = mark.get("results")
    if listed is None:
        return ProductState("absent")
    problems: list[Problem] = []
    results = {}
    for name, digest in listed.items():
        try:
            results[name] = _result_state(root, name, digest)
            _read_all_nodes(root, name, nodes)
        except (OSError, KeyError, TypeError, ValueError, AttributeError) as error:
            detail = str(error).splitlines()[0] if str(error) else type(error).__name__
            problems.append(_damage(root / name, f"result {name} is damaged: {detail}"))
    if problems:
        raise ProductError(*problems)
    return ProductState("ours", mark["spec"], mark["source"], results)


def _only_begun(root: Path) -> bool:
    """Whether nothing is there but the lock's file and halves of files."""
    lock = lock_file(root)
    ways = {lock, *lock.parents}
    folders = [root, root / REGISTER, lock.parent]
    return all(
        entry in ways or PARTIAL.search(entry.name)
        for folder in folders
        if folder.is_dir()
        for entry in folder.iterdir()
    )


def _root_mark(root: Path) -> tuple[Mapping[str, Any], Iterable[str]]:
    """Our attribute of the root, and the names of all groups and arrays in its copy."""
    try:
        text = (root / "zarr.json").read_bytes()
    except FileNotFoundError:
        raise _refusal(root, "something that is not a product lies there") from None
    try:
        node = json.loads(text)
        mark = node["attributes"][MARK]
        stored = mark["format"]
    except ValueError:
        raise ProductError(_damage(root / "zarr.json", "is damaged: not JSON")) from None
    except (KeyError, TypeError):
        raise _refusal(root, "a Zarr store of another program lies there") from None
    if stored != FORMAT:
        raise _refusal(root, f"a product of format {stored} lies there, this is format {FORMAT}")
    if "results" in mark and not (
        isinstance(mark["results"], dict)
        and isinstance(mark.get("source"), dict)
        and isinstance(mark.get("spec"), str)
    ):
        raise ProductError(_damage(root / "zarr.json", "is damaged: its attributes are not whole"))
    copy = node.get("consolidated_metadata")
    nodes = copy.get("metadata") if isinstance(copy, dict) else None
    return dict(mark), nodes if isinstance(nodes, dict) else ()


def _read_all_nodes(root: Path, name: str, nodes: Iterable[str]) -> None:
    """Reads the metadata of all that the root knows of a result; raises where some is lost."""
    tops = {str(folder.relative_to(root)) for folder in result_folders(root, name)}
    for node in nodes:
        if node in tops or any(node.startswith(f"{top}/") for top in tops):
            read_node(root / node)


def _result_state(root: Path, name: str, digest: str) -> ResultState:
    attributes = read_node(root / name)["attributes"]
    mark = attributes[MARK]
    if mark["digest"] != digest:
        raise ValueError(f"its digest {mark['digest']} is not the one listed, {digest}")
    array = zarr.open_array(str(root / name / name), mode="r")
    for entry in ARRAYS:
        read_node(root / REGISTER / name / entry)
    state = attributes["state"]
    if state not in ("growing", "ended"):
        raise ValueError(f"its state is {state!r}")
    return ResultState(
        name=name,
        dims=tuple(mark["dims"]),
        shape=tuple(array.shape),
        dtype=array.dtype.name,
        chunks=tuple(array.chunks),
        shards=None if array.shards is None else tuple(array.shards),
        time_dim=int(mark["time_dim"]),
        axis_kind=mark["axis_kind"],
        digest=digest,
        state=state,
        published_until=attributes.get("published_until"),
        facts=mark["facts"],
    )


def _refusal(where: Path, found: str) -> ProductError:
    return ProductError(
        Problem(str(where), found, "an empty place or a product of this program", _REMEDY)
    )


def _damage(where: Path, found: str) -> Problem:
    return Problem(str(where), found, "a whole product", _REMEDY)
