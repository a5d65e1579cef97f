"""Imports point one way; function-level ones are walked as well."""

from __future__ import annotations

import ast
from pathlib import Path

import pytest

PACKAGE = Path(__file__).parent.parent / "pipeline_filters"
OWN = {
    "errors": set(),
    "spec": {"errors"},
    "design": {"errors", "spec"},
    "layout": {"errors"},
    "kernels": {"errors"},
    "chain": {"errors", "spec", "design", "layout"},
    "stream": {"chain", "kernels", "layout"},
    "source": {"errors", "spec", "layout"},
    "stage": {
        *("errors", "spec", "design", "layout", "kernels", "chain", "stream"),
        *("source", "product", "graph", "spans"),
    },
    "cli": {"errors", "spec", "stage", "demo"},
    "demo": {"errors", "spec", "stage", "product"},
    "product": {"errors", "spec", "layout"},
    "graph": {"errors", "layout", "kernels", "chain", "stream", "spans"},
    "spans": {"errors", "chain", "kernels", "layout", "stream"},
}
OUTSIDE = {
    "dask": {"graph"},
    "yaml": {"spec"},
    "jsonschema": {"spec"},
    "zarr": {"source", "product", "demo"},
    "xarray": {"source", "product", "graph", "stage"},
    "matplotlib": {"demo"},
    "scipy.signal": {"design", "kernels"},
    "scipy.fft": {"kernels"},
}


def part_of(file: Path) -> str:
    first = file.relative_to(PACKAGE).parts[0]
    return first.removesuffix(".py")


def imports(file: Path) -> set[str]:
    found: set[str] = set()
    for node in ast.walk(ast.parse(file.read_text())):
        if isinstance(node, ast.Import):
            found |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{file}: relative import"
            found |= {f"{node.module}.{alias.name}" for alias in node.names}
    return found


FILES = sorted(PACKAGE.rglob("*.py"))


@pytest.mark.parametrize("file", FILES, ids=lambda f: str(f.relative_to(PACKAGE)))
def test_imports_point_one_way(file):
    part = part_of(file)
    if part == "__init__":
        return
    for name in imports(file):
        words = name.split(".")
        if words[0] == "pipeline_filters":
            assert words[1] == part or words[1] in OWN[part], name
        for library, allowed in OUTSIDE.items():
            if name == library or name.startswith(library + "."):
                assert part in allowed, name


@pytest.mark.parametrize("file", FILES, ids=lambda f: str(f.relative_to(PACKAGE)))
def test_files_stay_short(file):
    assert len(file.read_text().splitlines()) <= 400
