"""What is wrong with a spec, gathered from every check and told in the order of the text."""

from __future__ import annotations

import difflib
import itertools
from collections.abc import Iterable

from pipeline_filters.errors import Problem, SpecError
from pipeline_filters.spec.model import Place

# What one reads and mends before checking again; a text that is no spec may have far more.
_MOST_TOLD = 1000


class Findings:
    """Problems with their places; each is told once."""

    def __init__(self) -> None:
        self._found: dict[tuple[int, int, Problem], None] = {}

    def add(self, place: Place, found: str, allowed: str = "", remedy: str = "") -> None:
        """Notes one problem at ``place``."""
        problem = Problem(str(place), found, allowed, remedy)
        self._found[place.line, place.column, problem] = None

    def __bool__(self) -> bool:
        return bool(self._found)

    def refuse(self) -> None:
        """Ends the reading if anything was found.

        Raises:
            SpecError: with every problem, sorted by line and column; beyond 1,000 of them
                the last one says how many more there are.
        """
        if not self._found:
            return
        told = [problem for _, _, problem in sorted(self._found)]
        more = len(told) - _MOST_TOLD
        if more > 0:
            told[_MOST_TOLD:] = [Problem(told[_MOST_TOLD].where, f"{more} more from here on")]
        raise SpecError(*told)


def nearest(word: str, words: Iterable[str]) -> str | None:
    """The valid word that looks most like ``word``, in either case; None where none does."""
    # Comparing takes long: among more words than these nobody misses the nearest.
    by_lower = {valid.lower(): valid for valid in itertools.islice(words, 500)}
    close = difflib.get_close_matches(word.lower(), by_lower, n=1, cutoff=0.6)
    return by_lower[close[0]] if close else None


def did_you_mean(word: str, words: Iterable[str], otherwise: str = "") -> str:
    """A remedy for a misspelt word."""
    close = nearest(word, words)
    return f"did you mean {close}?" if close else otherwise


def listed(words: Iterable[object]) -> str:
    """Words in a row for people: ``a, b or c``."""
    *first, last = [str(word) for word in words] or ["nothing"]
    return f"{', '.join(first)} or {last}" if first else last


def shortened(text: str, most: int = 60) -> str:
    """A piece of the spec's text, on one line and not too long to read."""
    line = " ".join(text.split())
    return line if len(line) <= most else line[: most - 3] + "..."
