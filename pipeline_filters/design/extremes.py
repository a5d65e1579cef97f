"""Local maxima of a sampled curve, placed between its points by parabolas."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray


def local_maxima(
    x: NDArray[np.float64], y: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Places and heights of the local maxima of y over rising x, ends included.

    Args:
        x: shape (n,), rising, n >= 1, not necessarily even.
        y: shape (n,), finite.

    Returns:
        Places and heights, each of shape (m,), rising in x, m >= 1: the vertices of the
        parabolas through each inner maximum and its neighbours; at the ends, the ends.
    """
    if x.size < 3:
        peak = int(y.argmax())
        return x[peak : peak + 1], y[peak : peak + 1]
    inner = np.flatnonzero((y[1:-1] >= y[:-2]) & (y[1:-1] > y[2:])) + 1
    left, right = x[inner] - x[inner - 1], x[inner + 1] - x[inner]
    rise = (y[inner] - y[inner - 1]) / left
    fall = (y[inner + 1] - y[inner]) / right
    curvature = (fall - rise) / (left + right)  # below 0: rise >= 0 > fall
    slope = (rise * right + fall * left) / (left + right)
    places = np.clip(x[inner] - slope / (2 * curvature), x[inner - 1], x[inner + 1])
    heights = y[inner] - slope**2 / (4 * curvature)
    if y[0] >= y[1]:
        places, heights = np.append(x[0], places), np.append(y[0], heights)
    if y[-1] >= y[-2]:
        places, heights = np.append(places, x[-1]), np.append(heights, y[-1])
    return places, heights
