"""The process that workers are forked from; light, so that it may be started first of all."""

from __future__ import annotations

import signal
from collections.abc import Sequence
from multiprocessing import forkserver, resource_tracker, set_forkserver_preload


def start_fork_server(preload: Sequence[str] = ()) -> None:
    """Starts it, unless it runs, deaf to Ctrl-C from its first moment.

    Ctrl-C reaches every process of a terminal: the first one decides, workers end their span.
    A process that is still loading its libraries would tell of it with a traceback. What is
    blocked here stays blocked in what is started meanwhile, and nothing is lost here.

    Args:
        preload: modules that it loads, so that workers need not.
    """
    if preload:
        set_forkserver_preload(list(preload))
    resource_tracker.ensure_running()  # which would take the block away
    before = signal.pthread_sigmask(signal.SIG_BLOCK, {signal.SIGINT})
    try:
        forkserver.ensure_running()
    finally:
        signal.pthread_sigmask(signal.SIG_SETMASK, before)
