"""The block rule: hop and transform length of a run of taps."""

from __future__ import annotations

from fractions import Fraction
from math import ceil, floor

from pipeline_filters.errors import Problem, SpecError
from pipeline_filters.spec.model import Blocks


def _transform_at_least(least: int) -> int:
    """The smallest of 2^k and 3 * 2^k that is at least ``least``."""
    power = 1 << max(0, (least - 1).bit_length())
    three = 3 * (power >> 2)
    return three if three >= least else power


def block_rule(
    taps: int, blocks: Blocks, rate_hz: Fraction, *, waiting: int, result: str
) -> tuple[int, int]:
    """The hop B and the transform length N of a run of ``taps`` taps.

    N is the smallest of 2^k and 3 * 2^k that is at least B + P - 1 for a stated hop, or at
    least max(8P, 1024) for auto (2P where 8P would pass 2^20); then B = N - P + 1. A
    latency caps B so that a result waits no longer than it.

    Args:
        waiting: samples a result waits for besides its block (lead, filling of missing).

    Raises:
        SpecError: the hop is not a whole number of samples, or the latency is too short.
    """
    where = str(blocks.place or "blocks")
    if blocks.hop is not None:
        hop = blocks.hop.in_samples(rate_hz)
        if hop.denominator != 1 or hop < 1:
            raise SpecError(
                Problem(
                    where,
                    f"hop: {blocks.hop.text} is {float(hop):g} samples for result {result}",
                    "a hop is a whole number of samples, at least 1",
                    f"state {max(1, round(hop))} samples",
                )
            )
        return int(hop), _transform_at_least(int(hop) + taps - 1)
    transform = _transform_at_least(2 * taps if 8 * taps > 1 << 20 else max(8 * taps, 1024))
    hop_auto = transform - taps + 1
    if blocks.latency is None:
        return hop_auto, transform
    allowed = floor(blocks.latency.in_samples(rate_hz)) - waiting + 1
    if allowed < 1:
        least = ceil(waiting / rate_hz * 1000) / 1000
        raise SpecError(
            Problem(
                where,
                f"latency: {blocks.latency.text}, but result {result} waits for {waiting} samples "
                "whatever its blocks",
                f"at least {least:g} s for this chain",
                "allow more latency, or use causal timing or shorter taps",
            )
        )
    hop_capped = min(hop_auto, allowed)
    return hop_capped, min(transform, _transform_at_least(hop_capped + taps - 1))
