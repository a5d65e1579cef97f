"""What a run will do and cost, said before any sample is read."""

from __future__ import annotations

import os
from pathlib import Path
from typing import Any

from pipeline_filters.source.zarr_source import open_zarr_source
from pipeline_filters.spec import read_spec
from pipeline_filters.spec.model import Spec
from pipeline_filters.stage.compiling import (
    CompiledResult,
    chains_of,
    compile_results,
    used_signals,
)
from pipeline_filters.stage.figures import layout_figures
from pipeline_filters.stage.memory import step_bytes, workers_within

PathLike = str | Path


def as_spec(spec: Spec | PathLike) -> Spec:
    """A spec as it is, or read from a path or its text."""
    return spec if isinstance(spec, Spec) else read_spec(spec)


def check(spec: Spec | PathLike, source: PathLike | None = None) -> dict[str, Any]:
    """Designs every filter and holds it to its bands; with a source, fits both together.

    Returns:
        the record, as ``schemas/run-record.schema.json`` describes it.

    Raises:
        SpecError, ToleranceError, SourceError: what is refused.
    """
    spec = as_spec(spec)
    chains, _ = chains_of(spec)
    results: dict[str, Any] = {
        name: {**facts(spec, name), **chain} for name, (_, chain) in chains.items()
    }
    record = {**head("check", spec), "results": results}
    if source is not None:
        opened = open_zarr_source(source, used_signals(spec))
        for name, one in compile_results(spec, opened, chains, {}).items():
            results[name] |= {
                "samples": one.reader.length,
                "stretches": int(one.stretches.starts.size),
                "drift_ppm": one.axis.drift_ppm,
            }
        record["source"] = os.fspath(source)
    return record


def forecast(
    spec: Spec | PathLike,
    source: PathLike,
    *,
    workers: int = 1,
    budget_bytes: int | None = None,
) -> dict[str, Any]:
    """Says what a run will do and cost; reads the time axis, but no sample.

    Args:
        workers: processes wanted.
        budget_bytes: memory for the whole run; fewer workers are taken where it is short.

    Returns:
        the record, as ``schemas/run-record.schema.json`` describes it.

    Raises:
        SpecError, ToleranceError, SourceError: what is refused.
        BudgetError: a budget that cannot hold one step.
    """
    spec = as_spec(spec)
    chains, _ = chains_of(spec)
    opened = open_zarr_source(source, used_signals(spec))
    compiled = compile_results(spec, opened, chains, {})
    taken, one_bytes = workers_within(compiled.values(), workers, budget_bytes)
    return {
        **head("forecast", spec),
        "source": os.fspath(source),
        "results": {
            name: {**facts(spec, name), **run_figures(one, taken)} for name, one in compiled.items()
        },
        "memory": memory_figures(taken, one_bytes, budget_bytes),
    }


def run_figures(one: CompiledResult, workers: int) -> dict[str, Any]:
    """What is known of one result before its run."""
    return {
        **one.figures,
        **layout_figures(one, workers),
        "step_bytes": step_bytes(one),
    }


def memory_figures(workers: int, one_bytes: int, budget_bytes: int | None) -> dict[str, Any]:
    """What is known of workers and memory before a run."""
    return {
        "workers": workers,
        "budget_bytes": budget_bytes,
        "forecast_bytes_a_worker": one_bytes,
    }


def facts(spec: Spec, name: str) -> dict[str, Any]:
    """What a record says first of a result."""
    result = spec.results[name]
    return {"from": result.signal, "through": list(result.through)}


def head(did: str, spec: Spec) -> dict[str, Any]:
    """What a record says first."""
    return {
        "record_version": 1,
        "did": did,
        "spec": {"title": spec.title, "file": Path(spec.file).name},
        "warnings": list(spec.warnings),
    }
