"""How far a run has come: a bar on a terminal, a plain line now and then elsewhere."""

from __future__ import annotations

import sys
import time

_WIDTH = 30
_BAR_SECONDS = 0.1
_LINE_SECONDS = 30.0


class Progress:
    """Told of samples done and in all; writes to stderr, so that stdout stays for the result."""

    def __init__(self, quiet: bool = False) -> None:
        self.began = self.told = time.monotonic()
        self.quiet = quiet
        self.bar = sys.stderr.isatty()
        self.shown = False

    def __enter__(self) -> Progress:
        return self

    def __exit__(self, *_: object) -> None:
        if self.shown and self.bar:
            print("\r\033[K", end="", file=sys.stderr, flush=True)

    def __call__(self, done: int, total: int) -> None:
        """Takes note of how many of the results' samples are done."""
        now = time.monotonic()
        if (
            self.quiet
            or not total
            or now - self.told < (_BAR_SECONDS if self.bar else _LINE_SECONDS)
        ):
            return
        self.told, self.shown = now, True
        share = done / total
        left = (now - self.began) * (1 - share) / share if share else 0
        rate = done / (now - self.began) / 1e6
        words = f"{share:4.0%}, {rate:.1f} million samples a second, {duration(left)} left"
        if self.bar:
            full = "#" * round(_WIDTH * share)
            print(f"\r\033[K[{full:<{_WIDTH}}] {words}", end="", file=sys.stderr, flush=True)
        else:
            print(words, file=sys.stderr, flush=True)


def duration(seconds: float) -> str:
    """A stretch of time for people."""
    if seconds < 90:
        return f"{seconds:.0f} s"
    if seconds < 5400:
        return f"{seconds / 60:.0f} min"
    return f"{seconds / 3600:.1f} h"
