"""Impulse responses of recursions: how long they last, and their truncation."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.signal import sosfilt

from pipeline_filters.errors import Problem, SpecError

# A response that has not come to rest by then is refused.
MOST_SAMPLES = 1 << 24


def pole_radius(sections: NDArray[np.float64]) -> tuple[float, complex]:
    """The largest magnitude among the poles of second-order sections, and that pole."""
    poles = np.concatenate([np.roots(section[3:]) for section in sections])
    poles = poles[np.abs(poles) > 0]
    if not poles.size:
        return 0.0, 0j
    largest = poles[np.abs(poles).argmax()]
    return float(abs(largest)), complex(largest)


def impulse_response(
    sections: NDArray[np.float64], rest: float, where: str = "recursion"
) -> NDArray[np.float64]:
    """The impulse response, cut where the rest of the sum of |h| is below ``rest`` of it.

    The response is computed until its last stretch, as long as the slowest pole takes to
    decay by e, holds less than a thousandth of the allowed rest: what follows then decays
    geometrically and is smaller still.

    Args:
        sections: shape (S, 6), float64.

    Returns:
        shape (n,), float64, at least one sample.

    Raises:
        SpecError: a pole on or outside the unit circle, or so near to it that the response
            does not come to rest within 2^24 samples.
    """
    radius, pole = pole_radius(sections)
    if radius >= 1:
        raise SpecError(
            Problem(
                where,
                f"unstable: pole {pole:.12g} has magnitude {radius:.12g}",
                "poles inside the unit circle",
                "lower the order or widen the filter",
            )
        )
    fall = 1 if radius == 0 else max(1, int(np.ceil(-1 / np.log(radius))))
    state = np.zeros((sections.shape[0], 2))
    parts: list[NDArray[np.float64]] = []
    whole, count, first = 0.0, 0, True
    while True:
        piece = np.zeros(max(64, 8 * fall))
        piece[0] = 1.0 if first else 0.0
        first = False
        part, state = sosfilt(sections, piece, zi=state)
        parts.append(part)
        whole += float(np.abs(part).sum())
        count += part.size
        if float(np.abs(part[-max(1, fall) :]).sum()) <= 1e-3 * rest * whole:
            break
        if count > MOST_SAMPLES:
            raise SpecError(
                Problem(
                    where,
                    f"does not come to rest within {MOST_SAMPLES} samples: pole {pole:.12g} "
                    f"has magnitude {radius:.12g}",
                    "poles further inside the unit circle",
                    "widen the filter, or filter at a lower rate",
                )
            )
    response = np.concatenate(parts)
    return response[: max(1, settled_at(response, rest))]


def settled_at(response: NDArray[np.float64], share: float) -> int:
    """The smallest n for which the sum of |h[k]|, k >= n, is at most ``share`` of all."""
    rest = np.cumsum(np.abs(response[::-1]))[::-1]
    within = np.flatnonzero(rest <= share * rest[0])
    return int(within[0]) if within.size else int(response.size)


def settling_samples(sections: NDArray[np.float64], share: float, where: str = "recursion") -> int:
    """How many samples the response takes until no more than ``share`` of it is to come.

    Raises:
        SpecError: as `impulse_response`.
    """
    return settled_at(impulse_response(sections, min(share, 1) * 1e-3, where), share)
