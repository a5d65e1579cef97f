"""Samples that the spec's policies refuse, found and named."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pipeline_filters.errors import Problem, SourceError
from pipeline_filters.spec.model import Signal


def screen_rows(rows: NDArray[Any], signal: Signal, place: Callable[[int, int], str]) -> None:
    """Refuses missing or infinite samples where the spec says refuse.

    Args:
        rows: decoded samples, shape (channels, samples), NaN where missing.
        place: names the sample at (row, column), for people.

    Raises:
        SourceError: the first such sample of each kind, and how many there are here.
    """
    if rows.dtype.kind != "f":
        return
    with np.errstate(all="ignore"):
        if np.isfinite(rows.sum()):
            return
    problems = []
    for policy, name, wrong in (
        (signal.missing.policy, "missing", np.isnan(rows)),
        (signal.infinite, "infinite", np.isinf(rows)),
    ):
        count = int(np.count_nonzero(wrong))
        if policy != "refuse" or not count:
            continue
        column = int(wrong.any(axis=0).argmax())
        row = int(wrong[:, column].argmax())
        more = f" (and {count - 1} more nearby)" if count > 1 else ""
        remedy = "missing: spread or bridge" if name == "missing" else "infinite: missing"
        problems.append(
            Problem(
                place(row, column),
                f"{'a missing' if name == 'missing' else 'an infinite'} sample{more}",
                f"the spec says {name}: refuse",
                f"mend the source, or state {remedy} for signal {signal.name}",
            )
        )
    if problems:
        raise SourceError(*problems)
