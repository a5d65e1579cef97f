"""Who runs the tasks: this process alone, or worker processes beside it.

Processes, since threads lose some of a second core to the interpreter's lock (DEVELOPERS.md has
the figures). The jobs are sent to each worker once, as it starts; a task is a name and a few
numbers.
"""

from __future__ import annotations

import multiprocessing
import os
import signal
import sys
import threading
from collections.abc import Callable, Iterator
from concurrent.futures import ProcessPoolExecutor
from concurrent.futures.process import BrokenProcessPool
from contextlib import contextmanager
from functools import partial
from multiprocessing.context import ForkServerContext, ForkServerProcess
from types import ModuleType
from typing import Any

from dask import multiprocessing as dask_processes
from dask.local import get_sync

from pipeline_filters.errors import Problem, StoppedEarlyError
from pipeline_filters.graph.fork_server import start_fork_server
from pipeline_filters.graph.span_tasks import adopt
from pipeline_filters.spans import Jobs

# Tiny spans are sent in batches, as each message has a cost; long ones one by one.
_BATCH = 16
_LONG_FROM = 64


@contextmanager
def schedulers(jobs: Jobs, workers: int, tasks: int) -> Iterator[Callable[..., Any]]:
    """A Dask ``get`` over ``workers`` processes; over none but this one where that is 1.

    Args:
        tasks: how many there are to be run.

    Raises:
        StoppedEarlyError: a worker process has died; on leaving.
    """
    if workers == 1:
        adopt(jobs)
        yield get_sync
        return
    context = _Context()
    start_fork_server()
    pool = ProcessPoolExecutor(workers, context, initializer=_begin, initargs=(jobs,))
    try:
        with _signals_later():
            # Each of these starts a worker.
            for _ in range(min(workers, tasks)):
                pool.submit(_nothing)
        yield partial(
            dask_processes.get,
            pool=pool,
            num_workers=workers,
            optimize_graph=False,
            chunksize=1 if tasks < _LONG_FROM * workers else _BATCH,
        )
    except BrokenProcessPool:
        raise StoppedEarlyError(
            Problem(
                "a worker process",
                "it was ended from outside (often: out of memory)",
                remedy="run again; with a lower --memory or fewer --workers if it happens again",
            )
        ) from None
    finally:
        pool.shutdown(wait=True, cancel_futures=True)


class _Process(ForkServerProcess):
    """A process that does not run the calling script again.

    Workers need nothing of it, and where it lacks the guard ``if __name__ == "__main__"``
    each would begin the run anew; a script from standard input they could not even find.
    """

    @staticmethod
    def _Popen(process_obj: Any) -> Any:  # noqa: N802
        script = sys.modules["__main__"]
        sys.modules["__main__"] = ModuleType("__main__")
        try:
            return ForkServerProcess._Popen(process_obj)
        finally:
            sys.modules["__main__"] = script


class _Context(ForkServerContext):
    Process = _Process


@contextmanager
def _signals_later() -> Iterator[None]:
    """Lets a stop wait: a worker that starts meanwhile would not be known, and not be ended."""
    if threading.current_thread() is not threading.main_thread():
        yield  # elsewhere no signal arrives
        return
    came: list[int] = []
    before = {
        number: signal.signal(number, lambda number, _: came.append(number))
        for number in (signal.SIGINT, signal.SIGTERM)
    }
    try:
        yield
    finally:
        for number, handler in before.items():
            signal.signal(number, signal.SIG_DFL if handler is None else handler)
        for late in came:
            signal.raise_signal(late)


def _nothing() -> None:
    """A task that starts a worker."""


def _begin(jobs: Jobs) -> None:
    """What a worker does first."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    threading.Thread(target=_end_with_parent, daemon=True).start()
    adopt(jobs)


def _end_with_parent() -> None:
    # A worker would wait for ever for the next task of a process that was killed.
    parent = multiprocessing.parent_process()
    if parent is not None:
        parent.join()
        os._exit(1)
