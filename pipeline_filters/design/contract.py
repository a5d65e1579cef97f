"""What a method of design hands over: taps, or second-order sections."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True, eq=False)
class TapsResponse:
    """A response given by its taps.

    Attributes:
        taps: impulse response, shape (P,), float64; ``taps[k]`` multiplies ``x[n - k]``.
        linear_phase: symmetric or antisymmetric, to 1e-12 of the largest tap, so that the
            delay is (P - 1)/2 samples at every frequency.
        notes: facts about the design, for people.
    """

    taps: NDArray[np.float64]
    linear_phase: bool
    notes: tuple[str, ...] = ()


@dataclass(frozen=True, eq=False)
class SectionsResponse:
    """A stable recursion given by its second-order sections.

    Attributes:
        sections: shape (S, 6), float64: b0 b1 b2 1 a1 a2 a section.
        settle: the share of the sum of |h| under which a restarted recursion counts.
        notes: facts about the design, for people.
    """

    sections: NDArray[np.float64]
    settle: float
    notes: tuple[str, ...] = ()


Response = TapsResponse | SectionsResponse
