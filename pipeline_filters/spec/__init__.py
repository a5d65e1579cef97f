"""The filter spec: its language, its checks, and the model that the rest works with.

YAML, the schema and units are loaded when a spec is read, not when this package is imported.
"""

from __future__ import annotations

import os
from pathlib import Path

from pipeline_filters.spec.model import (
    Amount,
    Band,
    Blocks,
    Channels,
    Filter,
    Missing,
    Place,
    Result,
    Signal,
    Spec,
)

__all__ = [
    "Amount",
    "Band",
    "Blocks",
    "Channels",
    "Filter",
    "Missing",
    "Place",
    "Result",
    "Signal",
    "Spec",
    "parse_spec",
    "read_spec",
]


def read_spec(path_or_text: str | os.PathLike[str]) -> Spec:
    """Reads and checks a spec.

    Args:
        path_or_text: a path; or the spec's own text, which a line end in a `str` tells.

    Raises:
        SpecError: with every problem of the spec, sorted by ``file:line:column``.
    """
    if isinstance(path_or_text, str) and "\n" in path_or_text:
        return parse_spec(path_or_text, "<text>", None)
    from pipeline_filters.spec.building import read_file

    return read_file(path_or_text)


def parse_spec(text: str | bytes, file: str, folder: Path | None) -> Spec:
    """Checks a spec's text.

    Args:
        text: YAML, as text or as UTF-8 bytes.
        file: the name that places in messages carry.
        folder: where files that the spec names lie; None where it may name none.

    Raises:
        SpecError: with every problem of the spec, sorted by ``file:line:column``.
    """
    from pipeline_filters.spec.building import build_spec

    return build_spec(text, file, folder)
