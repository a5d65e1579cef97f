"""Plans and products for the tests of this folder: the gravel plate with three geophones."""

from __future__ import annotations

import hashlib
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np

from pipeline_filters.product.plan import ResultPlan
from pipeline_filters.product.store import Product

SURROUNDINGS = {"versions": {"numpy": "2.1.0"}, "processor": {"machine": "x86_64", "simd": []}}
IDENTITY = {"plate": {"variable": "velocity", "shape": [250, 3], "stamps_ns": [0, 249]}}
SPEC = "title: Weir plate\n"


def plan(name: str = "gravel_band", **changes: Any) -> ResultPlan:
    made = ResultPlan(
        name=name,
        dims=("time", "geophone"),
        shape=(250, 3),
        dtype="float32",
        chunks=(60, 2),
        shards=None,
        time_dim=0,
        axis_kind="stamped",
        attrs={"units": "mm/s", "long_name": "plate velocity, gravel band"},
        coords={"geophone": (("geophone",), np.array(["g01", "g02", "g05"]), {})},
        digest=hashlib.sha256(name.encode()).hexdigest(),
        facts={"taps": 181, "hop_samples": np.int64(844), "ripple_db": np.float64(0.1)},
        coefficients={"taps_0": np.linspace(0.0, 1.0, 7), "sections_1": np.ones((2, 6))},
    )
    return replace(made, **changes)


def prepare(path: Path, *plans: ResultPlan, **changes: Any) -> Product:
    given = {
        "spec_text": SPEC,
        "source_identity": IDENTITY,
        "source_path": None,
        "plans": plans or (plan(),),
        "surroundings": SURROUNDINGS,
    }
    return Product.prepare(path, **{**given, **changes})


def fill(product: Product, name: str, values: np.ndarray, step_ns: int = 1_000_000) -> None:
    """Writes and registers all units of a result."""
    state = product.results[name]
    writer, register = product.writer(name), product.register(name)
    dim, length = state.time_dim, state.shape[state.time_dim]
    box = tuple(slice(0, n) for index, n in enumerate(state.shape) if index != dim)
    for start in range(0, length, state.unit[dim]):
        stop = min(start + state.unit[dim], length)
        part = np.take(values, range(start, stop), axis=dim)
        writer.write(start, stop, box, part)
        if state.axis_kind != "counted":
            writer.write_stamps(start, stop, np.arange(start, stop) * step_ns)
    units = [(place, b"i" * 16, b"o" * 16) for place in np.ndindex(*register.grid)]
    register.mark(units)
    register.flush()


def tree_digest(path: Path) -> dict[str, str]:
    """Every file below a path, with its content and time of change."""
    return {
        str(file.relative_to(path)): f"{hashlib.sha256(file.read_bytes()).hexdigest()} "
        f"{file.stat().st_mtime_ns}"
        for file in sorted(path.rglob("*"))
        if file.is_file()
    }
