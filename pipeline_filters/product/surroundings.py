"""What may change the bits of a result besides spec and source: versions and processor."""

from __future__ import annotations

import platform
from importlib.metadata import PackageNotFoundError, version
from typing import Any

import numpy as np

# Every library that computes, converts or stores samples.
LIBRARIES = ("numpy", "scipy", "zarr", "dask", "pipeline-filters")


def surroundings() -> dict[str, Any]:
    """The versions and the processor class of this process, JSON-able.

    Returns:
        ``versions``: library name to version text; ``processor``: the machine's name and the
        instruction sets, beyond numpy's baseline, that numpy found and hence uses.
    """
    versions = {}
    for name in LIBRARIES:
        try:
            versions[name] = version(name)
        except PackageNotFoundError:
            versions[name] = "unknown"
    return {"versions": versions, "processor": processor_class()}


def processor_class() -> dict[str, Any]:
    """The machine's name and the instruction sets numpy may use on it."""
    shown: Any = np.show_config(mode="dicts")
    simd = (shown or {}).get("SIMD Extensions", {})
    return {
        "machine": platform.machine(),
        "simd": [*simd.get("baseline", ()), *simd.get("found", ())],
    }
