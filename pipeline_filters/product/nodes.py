"""The metadata of a product's groups and arrays: read from files, written in one step each.

The root holds a copy of all metadata below it ("consolidated"), as xarray warns where it finds
none. Zarr itself writes such a copy as a step of its own, so that it can be stale; here it goes
into the root's file together with the list of results.
"""

from __future__ import annotations

import json
import os
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from pipeline_filters.product.files import write_file

Node = dict[str, Any]
_FILE = "zarr.json"


def read_node(folder: Path) -> Node:
    """The metadata of a group or array.

    Raises:
        OSError: there is none.
        ValueError: it is not JSON, or no mapping.
    """
    node = json.loads((folder / _FILE).read_bytes())
    if not isinstance(node, dict):
        raise ValueError(f"{folder / _FILE} holds no metadata")
    return node


def write_node(folder: Path, node: Node) -> None:
    """Writes the metadata of a group or array, in one step."""
    write_file(str(folder / _FILE), json.dumps(node, indent=2, allow_nan=False).encode())


def new_group(folder: Path, attributes: Mapping[str, Any]) -> None:
    """Makes a group."""
    write_node(folder, {"attributes": dict(attributes), "zarr_format": 3, "node_type": "group"})


def change_attributes(folder: Path, attributes: Mapping[str, Any]) -> None:
    """Changes some attributes of a group or array, and keeps the others."""
    node = read_node(folder)
    node["attributes"] = {**node.get("attributes", {}), **attributes}
    write_node(folder, node)


def with_copy_of_all(root: Path, node: Node) -> Node:
    """The root's metadata with a fresh copy of all metadata below it."""
    found: dict[str, Node] = {}
    _collect(root, "", found)
    order = sorted(found, key=lambda key: (key.count("/"), key))
    return {**node, "consolidated_metadata": _copies({key: found[key] for key in order})}


def refresh_copy(root: Path) -> None:
    """Writes the root's copy of all metadata anew where it is stale."""
    node = read_node(root)
    fresh = with_copy_of_all(root, node)
    if fresh != node:
        write_node(root, fresh)


def copy_is_fresh(root: Path) -> bool:
    """Whether the root's copy of all metadata is what lies below it."""
    node = read_node(root)
    return with_copy_of_all(root, node) == node


def _copies(metadata: dict[str, Node]) -> Node:
    return {"kind": "inline", "must_understand": False, "metadata": metadata}


def _collect(folder: Path, prefix: str, found: dict[str, Node]) -> None:
    with os.scandir(folder) as entries:
        names = sorted(entry.name for entry in entries if entry.is_dir())
    for name in names:
        try:
            node = read_node(folder / name)
        except FileNotFoundError:
            continue
        if node["node_type"] == "group":
            node["consolidated_metadata"] = _copies({})
            found[prefix + name] = node
            _collect(folder / name, f"{prefix}{name}/", found)
        else:
            found[prefix + name] = node
