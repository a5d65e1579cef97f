"""The whole demo, one step after another."""

from __future__ import annotations

import os
import shlex
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

from pipeline_filters.demo.folder import DemoFolder, written
from pipeline_filters.demo.recording import GEOPHONES, RATE_HZ
from pipeline_filters.demo.story import gather, measured
from pipeline_filters.stage.running import run

HOW_TO_DRAW = "pip install 'pipeline-filters[pictures]'"
CAUTION = (
    "Filtering delays and removes information. Take no protective, medical or structural "
    "decision on filtered data alone."
)


def tell(
    folder: str | Path,
    *,
    workers: int = 1,
    progress: Callable[[int, int], None] | None = None,
) -> dict[str, Any]:
    """Lays down an invented recording, filters it, measures and draws what happened.

    Run again on the same folder, it keeps the recording and what is filtered already.

    Args:
        folder: new, or an earlier demo's.
        workers: processes; 1 is this one alone.
        progress: called with the results' samples done so far and in all.

    Returns:
        the record; it can be written as JSON.

    Raises:
        CommandLineError: the folder is not a demo's.
        FilterStageError: whatever else is refused.
    """
    began = time.perf_counter()
    own = DemoFolder(Path(folder))
    own.claim()
    recording, kept = own.recording()
    done = run(own.spec, own.source, own.product, workers=workers, progress=progress)
    evidence = gather(recording, own.product)
    record: dict[str, Any] = {
        "record_version": 1,
        "did": "demo",
        "folder": os.fspath(folder),
        "recording": {
            "state": "kept" if kept else "made",
            "geophones": GEOPHONES,
            "rate_hz": RATE_HZ,
            "samples": recording.values.shape[0],
            "seconds": recording.values.shape[0] / RATE_HZ,
        },
        "filtered": {"state": done["state"], "workers": workers},
        **measured(evidence, own.spec, own.product),
        "paths": {
            "recording": str(own.source),
            "spec": str(own.spec),
            "product": str(own.product),
        },
    }
    record["picture"] = _draw(own, evidence, record)
    if record["picture"]["drawn"]:
        record["paths"]["picture"] = str(own.picture)
    command = ["pipeline-filters", "filter", own.spec, own.source, own.path / "again.zarr"]
    record["next"] = shlex.join(map(str, command))
    record["caution"] = CAUTION
    record["seconds"] = round(time.perf_counter() - began, 2)
    return record


def _draw(own: DemoFolder, evidence: Any, record: dict[str, Any]) -> dict[str, Any]:
    try:
        from pipeline_filters.demo.picture import draw
    except ImportError as error:
        # Also where the library is there, but a part of it cannot be loaded.
        return {"drawn": False, "reason": str(error), "remedy": HOW_TO_DRAW}
    with written(own.picture):
        draw(evidence, record, own.picture)
    return {"drawn": True}
