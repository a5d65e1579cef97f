"""``check SPEC [SOURCE]``."""

from __future__ import annotations

from argparse import Namespace

from pipeline_filters.cli.wording import check_lines, show
from pipeline_filters.stage.forecasting import check


def call(options: Namespace) -> None:
    """Designs the filters of a spec, and fits it to a source where one is named."""
    show(check(options.spec, options.source), options.json, check_lines)
