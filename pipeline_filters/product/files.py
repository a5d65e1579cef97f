"""Writing a file so that it is either there whole or not there."""

from __future__ import annotations

import os
import secrets
from contextlib import suppress
from typing import Any


def write_file(path: str, data: Any) -> None:
    """Writes bytes under a passing name, then gives the file its own in one step.

    Args:
        data: anything that gives its bytes as a contiguous buffer.

    Raises:
        OSError: nothing is left behind then.
    """
    passing = f"{path}.{secrets.token_hex(16)}.partial"
    try:
        # Folders are nearly always there: asking first would cost every unit a call.
        descriptor = os.open(passing, os.O_WRONLY | os.O_CREAT | os.O_EXCL, 0o666)
    except FileNotFoundError:
        os.makedirs(os.path.dirname(path), exist_ok=True)
        descriptor = os.open(passing, os.O_WRONLY | os.O_CREAT | os.O_EXCL, 0o666)
    try:
        try:
            left = memoryview(data).cast("B")
            while left:
                left = left[os.write(descriptor, left) :]
        finally:
            os.close(descriptor)
        os.replace(passing, path)
    except BaseException:
        # A signal may come between the renaming and here.
        with suppress(FileNotFoundError):
            os.unlink(passing)
        raise
