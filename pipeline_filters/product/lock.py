"""One run at a time: a lock on a file in the product that dies with the process.

A POSIX record lock: the system drops it when the process ends, however it ends, and worker
processes do not inherit it, so that none of them can keep a product held after a crash. It
does not hold off a second holder in the same process, and closing any descriptor of the file
drops it; hence the table of what this process holds, looked at before the file is opened.
"""

from __future__ import annotations

import fcntl
import os
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from pipeline_filters.errors import HeldError, Problem
from pipeline_filters.product.refusals import refused_by_the_system

_held: set[tuple[int, int, int]] = set()
_held_guard = threading.Lock()


@contextmanager
def hold_file(file: Path, product: str | Path) -> Iterator[None]:
    """Holds ``file``, made where it is not there, until the context ends; the file stays.

    Raises:
        HeldError: another process, or another run in this one, holds it.
        SurroundingsError: the file cannot be made.
    """
    with _held_guard:
        with refused_by_the_system(product):
            if not file.exists():
                file.parent.mkdir(parents=True, exist_ok=True)
                os.close(os.open(file, os.O_RDWR | os.O_CREAT, 0o666))
            facts = os.stat(file)
        key = (os.getpid(), facts.st_dev, facts.st_ino)
        if key in _held:
            raise _held_error(product, "this process")
        _held.add(key)
    try:
        with refused_by_the_system(product):
            descriptor = os.open(file, os.O_RDWR)
        try:
            _lock(descriptor, product)
            yield
        finally:
            os.close(descriptor)
    finally:
        with _held_guard:
            _held.discard(key)


def _lock(descriptor: int, product: str | Path) -> None:
    try:
        fcntl.lockf(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except (BlockingIOError, PermissionError):
        holder = os.pread(descriptor, 200, 0).decode(errors="replace").strip()
        raise _held_error(product, holder or "another process") from None
    with refused_by_the_system(product):
        os.ftruncate(descriptor, 0)
        os.pwrite(descriptor, f"process {os.getpid()} on {os.uname().nodename}".encode(), 0)


def _held_error(product: str | Path, holder: str) -> HeldError:
    return HeldError(
        Problem(
            str(product),
            f"{holder} is writing this product",
            "one run at a time",
            "wait until it has ended, then run again",
        )
    )
