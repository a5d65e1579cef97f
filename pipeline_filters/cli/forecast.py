"""``forecast SPEC SOURCE``."""

from __future__ import annotations

from argparse import Namespace

from pipeline_filters.cli.surroundings import budget_of, workers_of
from pipeline_filters.cli.wording import forecast_lines, show
from pipeline_filters.stage.forecasting import forecast


def call(options: Namespace) -> None:
    """Says what a run will do and cost."""
    record = forecast(
        options.spec,
        options.source,
        workers=workers_of(options),
        budget_bytes=budget_of(options),
    )
    show(record, options.json, forecast_lines)
