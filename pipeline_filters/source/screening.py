"""Samples that the spec's policies refuse, found and named."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pipeline_filters.errors import Problem, SourceError
from pipeline_filters.source.decoding import all_finite
from pipeline_filters.spec.model import Signal

_ALLOWED = {
    "missing": "missing samples only where the spec says what becomes of them",
    "infinite": "finite samples, as the spec says infinite: refuse",
}


def screen_rows(rows: NDArray[Any], signal: Signal, place: Callable[[int, int], str]) -> None:
    """Refuses missing or infinite samples where the spec says refuse.

    Args:
        rows: decoded samples, shape (channels, samples), NaN where missing.
        place: names the sample at (row, column), for people.

    Raises:
        SourceError: the earliest such sample of each kind, and how many there are here.
    """
    refused = [
        (name, test)
        for name, policy, test in (
            ("missing", signal.missing.policy, np.isnan),
            ("infinite", signal.infinite, np.isinf),
        )
        if policy == "refuse"
    ]
    if not refused or rows.dtype.kind != "f" or all_finite(rows):
        return
    problems = []
    for name, test in refused:
        wrong = test(rows)
        count = int(np.count_nonzero(wrong))
        if not count:
            continue
        column = int(wrong.any(axis=0).argmax())
        row = int(wrong[:, column].argmax())
        article = "a missing" if name == "missing" else "an infinite"
        more = f" (and {count - 1} more in the samples read with it)" if count > 1 else ""
        remedy = "missing: spread or bridge" if name == "missing" else "infinite: missing"
        problems.append(
            Problem(
                place(row, column),
                f"{article} sample{more}",
                _ALLOWED[name],
                f"mend the source, or state {remedy} for signal {signal.name}",
            )
        )
    if problems:
        raise SourceError(*problems)
