"""Taps that the spec states itself, or loads from a file beside it."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
from numpy.typing import NDArray

from pipeline_filters.design.contract import TapsResponse
from pipeline_filters.design.settings import MOST_TAPS, typed
from pipeline_filters.errors import Problem, SpecError
from pipeline_filters.spec.model import Filter, Timing

# Of the largest tap: mirrored taps that differ by less count as equal.
SYMMETRY = 1e-12


def is_linear_phase(taps: NDArray[np.float64]) -> bool:
    """Whether taps, shape (P,), are symmetric or antisymmetric to 1e-12 of the largest."""
    limit = SYMMETRY * float(np.abs(taps).max())
    mirror = taps[::-1]
    return bool((np.abs(taps - mirror) <= limit).all() or (np.abs(taps + mirror) <= limit).all())


def design_taps(filter: Filter, rate_hz: Fraction, timing: Timing) -> TapsResponse:
    """The taps as given, whatever the rate and the timing; tested for linear phase.

    Raises:
        SpecError: no taps, too many, or none that does anything.
    """
    del rate_hz, timing  # given taps are what they are
    taps = np.array(typed(filter, "taps", tuple), np.float64)
    if taps.size == 0 or taps.size > MOST_TAPS:
        raise SpecError(
            Problem(
                filter.place("taps"),
                f"{taps.size} taps",
                f"1 to {MOST_TAPS} taps",
                "state at least one tap" if taps.size == 0 else "shorten the filter",
            )
        )
    wrong = np.flatnonzero(~np.isfinite(taps))
    if wrong.size:
        raise SpecError(
            Problem(
                filter.place("taps"),
                f"tap {wrong[0]} (counted from 0) is {taps[wrong[0]]}",
                "finite numbers",
                "correct the tap",
            )
        )
    if not taps.any():
        raise SpecError(
            Problem(
                filter.place("taps"),
                "taps that are all 0",
                "at least one tap that is not 0",
                "state the taps of the filter",
            )
        )
    linear_phase = is_linear_phase(taps)
    how = "linear phase" if linear_phase else "not symmetric: no constant delay"
    return TapsResponse(taps, linear_phase, (f"taps: {taps.size} given, {how}",))
