"""The checked time axis: its stretches as arrays, and stamps computed from them."""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from pipeline_filters.source.exact import divided_half_even, scaled_half_even
from pipeline_filters.spec.model import Signal

NS_PER_SECOND = 10**9


@dataclass(frozen=True, eq=False)
class Axis:
    """A checked time axis. An axis with many breaks is still a few arrays.

    Attributes:
        kind: stamped (CF datetimes), elapsed (numbers with a unit) or counted (no coordinate).
        rate_hz: samples per second, as the spec states it.
        starts, lengths: index of each stretch's first sample, and its samples; int64, in
            order, together all samples.
        first_ns: stamp of each stretch's first sample, int64 ns since 1970 (elapsed: since
            0; counted: 0).
        numbers: clock number of each stretch's first sample (counted: its index), int64.
        drift_ppm: the largest deviation of a mean rate from the stated one, in parts per
            million, over the stretches that are long enough to be judged.
        length: all samples.
    """

    kind: Literal["stamped", "elapsed", "counted"]
    rate_hz: Fraction
    starts: NDArray[np.int64]
    lengths: NDArray[np.int64]
    first_ns: NDArray[np.int64]
    numbers: NDArray[np.int64]
    drift_ppm: float
    length: int

    def stamps_at(self, start: int, stop: int, half_samples: int) -> NDArray[np.int64]:
        """Stamps of samples [start, stop) plus ``half_samples`` / 2 of a step, int64 ns.

        Computed in integers from the first stamp of each sample's stretch; the stamp is
        rounded half to even.
        """
        indexes = np.arange(start, stop, dtype=np.int64)
        stretch = np.searchsorted(self.starts, indexes, side="right") - 1
        halves = 2 * (indexes - self.starts[stretch]) + half_samples
        half_step = Fraction(NS_PER_SECOND) / self.rate_hz / 2
        return scaled_half_even(
            halves, half_step.numerator, half_step.denominator, self.first_ns[stretch]
        )


def clock_number(stamp_ns: int, rate_hz: Fraction) -> int:
    """The number of a sample by the clock: (stamp - epoch) * rate, rounded half to even."""
    return divided_half_even(stamp_ns * rate_hz.numerator, NS_PER_SECOND * rate_hz.denominator)


def clock_numbers(stamps_ns: NDArray[np.int64], rate_hz: Fraction) -> NDArray[np.int64]:
    """`clock_number` of many stamps."""
    bottom = NS_PER_SECOND * rate_hz.denominator
    return scaled_half_even(stamps_ns, rate_hz.numerator, bottom, np.zeros_like(stamps_ns))


def counted_axis(length: int, signal: Signal) -> Axis:
    """The axis of a source without stamps: one stretch, counted from 0."""
    zero = np.zeros(1, np.int64)
    whole = np.array([length], np.int64)
    return Axis("counted", signal.rate_hz, zero, whole, zero, zero, 0.0, length)
