"""Runs that are stopped from outside, and what is known of them meanwhile."""

from __future__ import annotations

import os
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import zarr
from made_runs import SMALL_STEPS, START, begin

# Each span is followed by a pause, so that a stop finds work begun and not ended.
SLOWLY = (
    SMALL_STEPS
    + "import time; took = r._Work._took; "
    + "r._Work._took = lambda *all: (took(*all), time.sleep({pause})); "
    + START
)


def begin_slowly(arguments: list[object], pause: float = 0.02) -> Any:
    return begin(*arguments, start=SLOWLY.format(pause=pause))


def units_done(product: Path) -> int:
    """Units that the register knows as done; 0 where there is no register yet."""
    done = 0
    for folder in product.glob("register/*/state"):
        try:
            done += int(zarr.open_array(str(folder), mode="r")[...].sum())
        except (OSError, ValueError, KeyError):
            return 0
    return done


def wait_for(run: Any, product: Path, units: int) -> None:
    """Waits until some units are done; fails where the run ends before."""
    end = time.monotonic() + 60
    while units_done(product) < units:
        assert run.poll() is None, run.communicate()
        assert time.monotonic() < end
        time.sleep(0.005)


def in_session(leader: int) -> Iterator[tuple[int, int]]:
    """Process and parent ids of a session that live."""
    for name in os.listdir("/proc"):
        if name.isdigit():
            try:
                fields = Path("/proc", name, "stat").read_text().rpartition(")")[2].split()
            except (FileNotFoundError, ProcessLookupError):
                continue
            state, parent, session = fields[0], int(fields[1]), int(fields[3])
            if session == leader and state not in "ZX":
                yield int(name), parent


def workers_of(leader: int) -> list[int]:
    """The worker processes of a run: children of its fork server, which forks nothing else."""
    members = dict(in_session(leader))
    servers = {pid for pid, parent in members.items() if parent == leader}
    return sorted(pid for pid, parent in members.items() if parent in servers)


def wait_for_none(leader: int) -> None:
    """Waits until no process of a session is left."""
    end = time.monotonic() + 20
    while left := list(in_session(leader)):
        assert time.monotonic() < end, left
        time.sleep(0.01)
