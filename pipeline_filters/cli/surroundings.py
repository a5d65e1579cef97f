"""What the machine and the options leave for a run."""

from __future__ import annotations

import os
from argparse import Namespace


def workers_of(options: Namespace) -> int:
    """Worker processes: as asked, else one for each core that this process may use."""
    if options.workers is not None:
        return int(options.workers)
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


def budget_of(options: Namespace) -> int | None:
    """The memory for the whole run; None where none is stated.

    Raises:
        CommandLineError: what is stated is no amount of memory.
    """
    if options.memory is None:
        return None
    from pipeline_filters.spec.quantities import parse_bytes

    return parse_bytes(options.memory)
