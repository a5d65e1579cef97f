"""The moving average: equal taps."""

from __future__ import annotations

from fractions import Fraction

import numpy as np

from pipeline_filters.design.contract import TapsResponse
from pipeline_filters.design.settings import whole_samples
from pipeline_filters.spec.model import Filter, Timing


def design_moving_average(filter: Filter, rate_hz: Fraction, timing: Timing) -> TapsResponse:
    """The mean over a length of whole samples: P taps of 1/P.

    Raises:
        SpecError: a length that is not whole samples; the nearest that are, are named.
    """
    del timing  # nothing in it to aim
    length = whole_samples(filter, "length", rate_hz)
    note = f"moving-average: {length} taps, first zero at {float(rate_hz) / length:.6g} Hz"
    return TapsResponse(np.full(length, 1 / length), True, (note,))
