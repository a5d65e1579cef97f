"""A filtering stage for scheduled data pipelines: chunked recordings, exact results.

Public names, loaded when they are first asked for:

| name | what it does |
|---|---|
| read_spec | reads and checks a YAML spec |
| check | designs its filters and holds them to what they promise |
| forecast | says what a run will do and cost |
| run | filters a source into a product |
| open_product | opens the settled part of a product |
| compile_spec | results over an xarray Dataset, as lazy arrays |
| FilterStageError | the base of every refusal |

The parts, in the order in which they may see each other: errors, spec, design, chain; layout
and kernels see only errors; stream joins chain and kernels; source and product know neither;
spans runs one piece of work, graph makes Dask tasks of them, stage joins all, cli speaks.
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from pipeline_filters.errors import FilterStageError
    from pipeline_filters.product.reading import open_product
    from pipeline_filters.spec import read_spec
    from pipeline_filters.stage.forecasting import check, forecast
    from pipeline_filters.stage.lazily import compile_spec
    from pipeline_filters.stage.running import run

_PLACES = {
    "FilterStageError": "errors",
    "check": "stage.forecasting",
    "compile_spec": "stage.lazily",
    "forecast": "stage.forecasting",
    "open_product": "product.reading",
    "read_spec": "spec",
    "run": "stage.running",
}

__all__ = [
    "FilterStageError",
    "check",
    "compile_spec",
    "forecast",
    "open_product",
    "read_spec",
    "run",
]


def __getattr__(name: str) -> Any:
    if name not in _PLACES:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    return getattr(importlib.import_module(f"{__name__}.{_PLACES[name]}"), name)
