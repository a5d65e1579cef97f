"""Responses that are given, or follow from a length: taps, and the moving average."""

from __future__ import annotations

from fractions import Fraction

import numpy as np

from pipeline_filters.design.contract import Response, TapsResponse
from pipeline_filters.design.settings import amount_setting, whole_samples
from pipeline_filters.errors import Problem, SpecError
from pipeline_filters.spec.model import Filter, Timing

_SYMMETRY = 1e-12


def is_linear_phase(taps: np.ndarray) -> bool:
    """Whether taps are symmetric or antisymmetric, to 1e-12 of the largest."""
    limit = _SYMMETRY * float(np.abs(taps).max())
    mirror = taps[::-1]
    return bool((np.abs(taps - mirror) <= limit).all() or (np.abs(taps + mirror) <= limit).all())


def design_taps(filter: Filter, rate_hz: Fraction, timing: Timing) -> Response:
    """The taps as the spec gives them; linear-phase where they are tested to be."""
    del rate_hz, timing
    given = filter.settings["taps"]
    assert isinstance(given, tuple)
    taps = np.array(given, np.float64)
    if not taps.size or not np.isfinite(taps).all() or not taps.any():
        raise SpecError(
            Problem(
                filter.place("taps"),
                "taps that are none, not finite, or all zero",
                "at least one finite tap that is not zero",
            )
        )
    return TapsResponse(taps, is_linear_phase(taps), (f"{taps.size} taps given",))


def design_moving_average(filter: Filter, rate_hz: Fraction, timing: Timing) -> Response:
    """The mean of the last P samples: P taps of 1/P."""
    del timing
    length = whole_samples(filter, "length", amount_setting(filter, "length"), rate_hz)
    return TapsResponse(np.full(length, 1 / length), True, (f"{length} equal taps",))
