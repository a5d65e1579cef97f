"""Impulse responses of recursions: how long they last, and where they may be cut."""

from __future__ import annotations

from math import ceil, log

import numpy as np
from numpy.typing import NDArray

from pipeline_filters.errors import Problem, SpecError

# A response that has not come to rest by then is refused.
MOST_SAMPLES = 1 << 24
# What lies past the computed stretch may be this share of the rest that is asked for.
_UNSEEN = 1e-6


def poles_of(sections: NDArray[np.float64]) -> NDArray[np.complex128]:
    """All poles of second-order sections, shape (2 S,), those at 0 included.

    From the quadratic's closed form, in which the radius of a complex pair keeps all the
    digits of a2.
    """
    a1, a2 = sections[:, 4] / sections[:, 3], sections[:, 5] / sections[:, 3]
    half = -a1 / 2
    square = half**2 - a2
    imaginary = np.sqrt(np.maximum(-square, 0))
    larger = half + np.copysign(np.sqrt(np.maximum(square, 0)), half)
    smaller = np.divide(a2, larger, out=np.zeros_like(larger), where=larger != 0)
    pair = square < 0
    one = np.where(pair, half + 1j * imaginary, larger)
    two = np.where(pair, half - 1j * imaginary, smaller)
    return np.concatenate([one, two]).astype(np.complex128)


def pole_radius(sections: NDArray[np.float64]) -> tuple[float, complex]:
    """The largest magnitude among the poles of second-order sections, and that pole."""
    poles = poles_of(sections)
    largest = poles[np.abs(poles).argmax()]
    return float(abs(largest)), complex(largest)


def refuse_restless(
    sections: NDArray[np.float64],
    rest: float = 1e-12,
    where: str = "recursion",
    most: int = MOST_SAMPLES,
) -> None:
    """Refuses sections that are unstable, or that take too long to come to rest.

    Judged by the slowest pole alone: within ``most`` samples the powers of its radius must
    fall below ``rest``.

    Raises:
        SpecError: a coefficient that is not finite; a pole on or outside the unit circle, or
            nearer to it than that.
    """
    if not np.isfinite(sections).all() or not (sections[:, 3] != 0).all():
        raise SpecError(
            Problem(
                where,
                "coefficients that are not finite",
                "a recursion that double precision can hold",
                "lower the order, widen the filter, or filter at a lower rate",
            )
        )
    radius, pole = pole_radius(sections)
    if radius >= 1:
        raise SpecError(
            Problem(
                where,
                f"unstable: pole {pole:.12g} has magnitude {radius:.15g}",
                "poles inside the unit circle",
                "lower the order, widen the filter, or filter at a lower rate",
            )
        )
    if radius > 0 and log(rest) / log(radius) > most:
        raise _too_slow(radius, pole, most, where)


def _too_slow(radius: float, pole: complex, most: int, where: str) -> SpecError:
    return SpecError(
        Problem(
            where,
            f"a recursion that does not come to rest within {most} samples: pole {pole:.12g} "
            f"has magnitude {radius:.15g}",
            "poles further inside the unit circle",
            "widen the filter, or filter at a lower rate",
        )
    )


def _computed(
    sections: NDArray[np.float64], rest: float, most: int, where: str
) -> tuple[NDArray[np.float64], float]:
    """The impulse response as far as needed, and a bound on the sum of |h| past it.

    Computed in pieces over which the slowest pole falls by e^8. Past the last piece, sums
    fall at least as fast as between the last two (a repeated pole falls slower at first,
    never later on), which bounds all the rest by a geometric series.
    """
    from scipy.signal import sosfilt  # long to load, so only where it is asked for

    refuse_restless(sections, rest, where, most)
    radius, pole = pole_radius(sections)
    length = 64 if radius == 0 else max(64, ceil(-8 / log(radius)))
    least_ratio = radius**length
    state = np.zeros((sections.shape[0], 2))
    piece = np.zeros(length)
    piece[0] = 1.0
    parts: list[NDArray[np.float64]] = []
    whole, before = 0.0, np.inf
    while True:
        part, state = sosfilt(sections, piece, zi=state)
        piece[0] = 0.0
        parts.append(part)
        now = float(np.abs(part).sum())
        whole += now
        ratio = max(now / before if before > 0 else 0.0, least_ratio)
        unseen = now * ratio / (1 - ratio) if ratio < 1 else np.inf
        if len(parts) > 1 and unseen <= _UNSEEN * rest * whole:
            return np.concatenate(parts), unseen
        if len(parts) * length > most + 4 * length:
            raise _too_slow(radius, pole, most, where)
        before = now


def impulse_response(
    sections: NDArray[np.float64],
    rest: float = 1e-12,
    where: str = "recursion",
    most: int = MOST_SAMPLES,
) -> NDArray[np.float64]:
    """The impulse response, cut where the rest of the sum of |h| is below ``rest`` of it.

    Args:
        sections: shape (S, 6), float64: b0 b1 b2 1 a1 a2 a section.
        rest: the share of the whole sum that may be cut off, between 0 and 1.
        where: the place that a refusal names.
        most: samples within which it must have come to rest.

    Returns:
        shape (n,), float64, n >= 1.

    Raises:
        SpecError: a pole on or outside the unit circle, or so near to it that the response
            does not come to rest within ``most`` samples.
    """
    response, unseen = _computed(sections, rest, most, where)
    return response[: max(1, _settled_at(response, unseen, rest))]


def settling_samples(
    sections: NDArray[np.float64],
    share: float,
    where: str = "recursion",
    most: int = MOST_SAMPLES,
) -> int:
    """The smallest n for which the sum of |h[k]|, k >= n, is at most ``share`` of all.

    Args:
        sections: shape (S, 6), float64.
        share: of the whole sum of |h|, above 0; 1 or more gives 0.
        where: the place that a refusal names.
        most: samples within which it must have come to rest.

    Raises:
        SpecError: as `impulse_response`.
    """
    if share >= 1:
        return 0
    response, unseen = _computed(sections, share, most, where)
    return _settled_at(response, unseen, share)


def _settled_at(response: NDArray[np.float64], unseen: float, share: float) -> int:
    rest = np.cumsum(np.abs(response[::-1]))[::-1] + unseen
    within = np.flatnonzero(rest <= share * rest[0])
    return int(within[0]) if within.size else int(response.size)
