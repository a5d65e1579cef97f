"""``filter SPEC SOURCE PRODUCT``."""

from __future__ import annotations

from argparse import Namespace

from pipeline_filters.cli.progress import Progress
from pipeline_filters.cli.surroundings import budget_of, workers_of
from pipeline_filters.cli.wording import run_lines, show
from pipeline_filters.stage.ahead import start_workers_early


def call(options: Namespace) -> None:
    """Filters a source into a product."""
    workers = workers_of(options)
    start_workers_early(workers)
    # Half a second to load: workers load meanwhile.
    from pipeline_filters.stage.running import run

    with Progress(quiet=options.json) as progress:
        record = run(
            options.spec,
            options.source,
            options.product,
            workers=workers,
            budget_bytes=budget_of(options),
            progress=progress,
        )
    show(record, options.json, run_lines)
