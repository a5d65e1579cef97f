"""Worker processes got ready while this process still reads the spec.

Workers are forked from a process that has loaded what they need. Started first, it loads on
one core what this process loads on another.
"""

from __future__ import annotations

from pipeline_filters.graph.fork_server import start_fork_server

# What a worker needs: how to run a span, to read and to write.
PARTS = (
    "pipeline_filters.graph.workers",
    "pipeline_filters.source.zarr_source",
    "pipeline_filters.product.writer",
)


def start_workers_early(workers: int) -> None:
    """Starts the process that workers are forked from, unless it runs or none are wanted."""
    if workers > 1:
        start_fork_server(PARTS)
