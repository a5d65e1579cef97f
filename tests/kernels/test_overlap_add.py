"""Block convolution against textbook facts and exact arithmetic."""

from __future__ import annotations

import mpmath
import numpy as np
import pytest

from pipeline_filters.kernels.overlap_add import OverlapAdd

FLOAT64 = np.dtype(np.float64)


def convolved(row, taps, hop, transform):
    kernel = OverlapAdd(
        1, np.array(taps, float), hop=hop, transform=transform, start=0, emit_from=0, dtype=FLOAT64
    )
    padded = np.concatenate([row, np.zeros(len(taps) - 1)])[None]
    return np.concatenate([kernel.push(padded), kernel.finish()], axis=1)[0]


def test_linear_convolution_of_the_textbook_example():
    # Proakis and Manolakis, Digital Signal Processing, 3rd ed., example 5.3.1 (from memory,
    # recomputed): with a 4-point DFT it would wrap to 9, 7, 9, 11.
    out = convolved(np.array([1.0, 2, 2, 1]), [1, 2, 3], hop=4, transform=6)
    np.testing.assert_allclose(out, [1, 4, 9, 11, 8, 3], atol=1e-14)


def test_a_transform_that_would_wrap_is_refused():
    with pytest.raises(ValueError, match="wrap"):
        convolved(np.ones(4), [1, 2, 3], hop=4, transform=5)


def test_twelve_ones_through_the_binomial_smoother():
    # Linear against circular convolution (Oppenheim and Schafer, section 8.7).
    out = convolved(np.ones(12), np.array([1, 4, 6, 4, 1]) / 16, hop=5, transform=9)
    edge = np.array([1, 5, 11, 15]) / 16
    np.testing.assert_allclose(out, [*edge, *np.ones(8), *edge[::-1]], atol=1e-15)


def test_error_stays_under_the_stated_bound_against_exact_sums():
    # c * eps * log2(N) * |x|_2 * |h|_2 with c = 0.25, half of what a chain states at N = 64 or
    # less, against 50-digit sums.
    mpmath.mp.dps = 50
    rng = np.random.default_rng(5)
    row, taps = rng.standard_normal(96), rng.standard_normal(33)
    out = convolved(row, taps, hop=32, transform=64)
    bound = 0.25 * np.finfo(float).eps * 6 * np.linalg.norm(row) * np.linalg.norm(taps)
    for m in range(out.size):
        pairs = [(k, m - k) for k in range(33) if 0 <= m - k < 96]
        exact = mpmath.fsum(mpmath.mpf(taps[k]) * mpmath.mpf(row[i]) for k, i in pairs)
        assert abs(mpmath.mpf(out[m]) - exact) <= bound
