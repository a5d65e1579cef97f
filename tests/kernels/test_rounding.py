"""A-priori bounds on rounding, against sums in extended precision.

u is the unit roundoff, eps = 2 u; gamma(n) = n u / (1 - n u). Sums and transforms in
numpy.longdouble serve as exact: their own errors are thousands of times smaller.
"""

from __future__ import annotations

from fractions import Fraction
from math import ceil, log2, sqrt

import mpmath
import numpy as np
import pytest
import scipy.fft

from pipeline_filters.chain.model import Chain, TapsStage
from pipeline_filters.kernels.overlap_add import DirectSum, OverlapAdd

pytestmark = pytest.mark.skipif(
    np.finfo(np.longdouble).eps > 2.0**-60, reason="no extended precision here"
)

UNIT = {"float32": 2.0**-24, "float64": 2.0**-53}
# P, B, N: by the auto rule (1,024 and above) and for stated hops.
SHAPES = [
    (1, 2, 2),
    (2, 2, 3),
    (3, 4, 6),
    (5, 12, 16),
    (8, 17, 24),
    (17, 32, 48),
    (33, 32, 64),
    (15, 178, 192),
    (129, 128, 256),
    (128, 897, 1024),
    (150, 1387, 1536),
    (200, 1849, 2048),
]


def overlap_add(rows, taps, hop, transform, dtype, start=0):
    kernel = OverlapAdd(
        rows.shape[0], taps, hop=hop, transform=transform, start=start, emit_from=start,
        dtype=np.dtype(dtype),
    )  # fmt: skip
    tail = np.zeros((rows.shape[0], taps.size - 1), dtype)
    return np.concatenate([kernel.push(rows), kernel.push(tail), kernel.finish()], axis=1)


def direct(rows, taps, dtype):
    kernel = DirectSum(rows.shape[0], taps, start=0, emit_from=0, dtype=np.dtype(dtype))
    tail = np.zeros((rows.shape[0], taps.size - 1), dtype)
    return np.concatenate([kernel.push(rows), kernel.push(tail)], axis=1)


def exact(rows, taps):
    """Full convolution in extended precision, shape (rows, n + P - 1)."""
    out = np.zeros((rows.shape[0], rows.shape[1] + taps.size - 1), np.longdouble)
    for k in np.flatnonzero(taps):
        out[:, k : k + rows.shape[1]] += np.longdouble(taps[k]) * rows
    return out


def bound_of(taps, hop, transform, precision) -> float:
    stage = TapsStage(taps, 0, taps.size - 1, 0, 0, hop, transform)
    chain = Chain((stage,), Fraction(1000), "causal", "zero", precision, 0, None)
    bound = chain.rounding_bound()
    assert bound is not None
    return bound


def hostile_taps(rng, p):
    """Taps whose errors were the largest in searches: lone ones, above all."""
    lone = np.zeros(p)
    lone[rng.integers(p)] = rng.uniform(1, 2)
    pair = np.zeros(p)
    pair[0], pair[-1] = 1, -rng.uniform(1, 2)
    k = np.arange(p)
    return [
        lone,
        pair,
        rng.standard_normal(p),
        np.full(p, 1 / 3),
        (-1.0) ** k,
        np.cos(2 * np.pi * k / 8 + 0.3),
        0.9**k,  # not so fast that products fall below what floats can hold
    ]


def hostile_rows(rng, n, taps):
    lone = np.zeros((12, n))
    lone[np.arange(12), rng.integers(n, size=12)] = rng.uniform(1, 2, 12)
    pair = np.roll(lone, 1, axis=1) - lone * rng.uniform(1, 2)
    k = np.arange(n)
    plain = [
        np.full(n, 1 / 3),
        (-1.0) ** k / 3,
        np.cos(2 * np.pi * k / 8 + 0.3),
        np.resize(taps[::-1], n),
        np.full(n, 1 + 2.0**-12),
        10.0 ** rng.uniform(-6, 6, n) * rng.choice([-1, 1], n),
    ]
    return np.concatenate([lone, pair, rng.standard_normal((12, n)), plain])


@pytest.mark.parametrize("precision", ["float32", "float64"])
@pytest.mark.parametrize(("p", "hop", "transform"), SHAPES)
def test_one_block_stays_under_the_stated_bound(p, hop, transform, precision):
    rng = np.random.default_rng(transform)
    for taps in hostile_taps(rng, p):
        rows = hostile_rows(rng, hop, taps).astype(precision)
        error = np.abs(overlap_add(rows, taps, hop, transform, precision) - exact(rows, taps))
        norms = np.linalg.norm(rows.astype(np.float64), axis=1)
        limit = bound_of(taps, hop, transform, precision) * norms
        assert (error.max(axis=1) <= limit).all()


@pytest.mark.parametrize("precision", ["float32", "float64"])
@pytest.mark.parametrize(("p", "hop", "transform"), SHAPES)
def test_percivals_bound_holds_for_every_block(p, hop, transform, precision):
    # Percival, Math. Comp. 72, 387-395, 2003, theorem 5.1 (from memory only), stated for
    # N = 2^n; for 3 * 2^k held with n rounded up. beta: twiddles rounded correctly.
    u, n = UNIT[precision], ceil(log2(transform))
    beta = u / sqrt(2)
    factor = (1 + u) ** (3 * n) * (1 + sqrt(5) * u) ** (3 * n + 1) * (1 + beta) ** (3 * n) - 1
    rng = np.random.default_rng(transform + 1)
    for taps in hostile_taps(rng, p):
        rows = hostile_rows(rng, hop, taps).astype(precision)
        error = np.abs(overlap_add(rows, taps, hop, transform, precision) - exact(rows, taps))
        norms = np.linalg.norm(rows.astype(np.float64), axis=1) * np.linalg.norm(taps)
        assert (error.max(axis=1) <= factor * norms).all()
        # What the record states is the tighter of the two from N = 8 on.
        if transform >= 8:
            assert bound_of(taps, hop, transform, precision) <= factor * np.linalg.norm(taps)


def test_percivals_coefficients():
    # 120.5 u at n = 10, 191.5 u at n = 16, 238.8 u at n = 20 (recomputed).
    u = UNIT["float64"]
    for n, expected in [(10, 120.5), (16, 191.5), (20, 238.8)]:
        parts = 3 * n + sqrt(5) * (3 * n + 1) + 3 * n / sqrt(2)
        assert parts == pytest.approx(expected, abs=0.06)
        assert parts * u < 1e-13


@pytest.mark.parametrize("precision", ["float32", "float64"])
@pytest.mark.parametrize(("p", "hop", "transform"), [(128, 897, 1024), (256, 1793, 2048)])
def test_random_blocks_stay_under_a_tighter_number(p, hop, transform, precision):
    # A regression check besides the loose bounds: 4 u |x| |h| a block (common practice).
    rng = np.random.default_rng(p)
    rows, taps = rng.standard_normal((20, hop)).astype(precision), rng.standard_normal(p)
    error = np.abs(overlap_add(rows, taps, hop, transform, precision) - exact(rows, taps))
    norms = np.linalg.norm(rows.astype(np.float64), axis=1) * np.linalg.norm(taps)
    assert (error.max(axis=1) <= 4 * UNIT[precision] * norms).all()


@pytest.mark.parametrize("precision", ["float32", "float64"])
def test_errors_of_a_long_row_are_those_of_its_own_blocks(precision):
    # The bound is per block (Percival; small results beside large ones lose digits), so
    # the result of every position is held to the norms of the blocks that reach it.
    p, hop, transform = 100, 157, 256
    rng = np.random.default_rng(8)
    rows = rng.standard_normal((3, 20 * hop)).astype(precision)
    rows[:, 7 * hop : 8 * hop] *= 1e6
    taps = rng.standard_normal(p)
    out = overlap_add(rows, taps, hop, transform, precision)
    error = np.abs(out - exact(rows, taps))
    norms = np.linalg.norm(rows.reshape(3, 20, hop).astype(np.float64), axis=2)
    reach = np.zeros((3, out.shape[1]))
    for block in range(20):
        reach[:, block * hop : (block + 1) * hop + p - 1] += norms[:, block : block + 1]
    assert (error <= bound_of(taps, hop, transform, precision) * reach).all()
    # Further off, the large block leaves no trace at all.
    calm = rows.copy()
    calm[:, 7 * hop : 8 * hop] = 0
    quiet = overlap_add(calm, taps, hop, transform, precision)
    far = np.r_[: 7 * hop, 8 * hop + p - 1 : out.shape[1]]
    assert out[:, far].tobytes() == quiet[:, far].tobytes()


@pytest.mark.parametrize("precision", ["float32", "float64"])
@pytest.mark.parametrize("p", [1, 2, 7, 40, 200])
def test_direct_sums_stay_under_highams_bound(p, precision):
    # Higham, Accuracy and Stability of Numerical Algorithms, 2nd ed., section 3.1, (3.5):
    # gamma(P) sum |h[k]| |x[n - k]|, whatever the order of the sum.
    u = UNIT[precision]
    gamma = p * u / (1 - p * u)
    rng = np.random.default_rng(p)
    for taps in hostile_taps(rng, p):
        rows = hostile_rows(rng, 300, taps).astype(precision)
        rounded = taps.astype(precision).astype(np.float64)
        out = direct(rows, taps, precision)
        error = np.abs(out - exact(rows, rounded))
        assert (error <= gamma * exact(np.abs(rows), np.abs(rounded))).all()
        # The chain states the same by norms, and one more for rounding the taps.
        under = np.sqrt(exact(rows.astype(np.float64) ** 2, np.ones(p)))
        error = np.abs(out - exact(rows, taps))
        assert (error <= bound_of(taps, 1, 1024, precision) * under * (1 + 1e-12)).all()


def test_direct_sums_are_taken_in_ascending_order_of_taps():
    rng = np.random.default_rng(2)
    row, taps = rng.standard_normal(60), rng.standard_normal(9)
    out = direct(row[None], taps, "float64")[0]
    for n in range(8, 60):
        total = taps[0] * row[n]
        for k in range(1, 9):
            total = total + taps[k] * row[n - k]
        assert out[n] == total


@pytest.mark.parametrize("kind", ["direct", "overlap-add"])
def test_whole_numbers_against_exact_integers(kind):
    # Sums of integers that fit are exact when summed directly, and exact after rounding when
    # taken through transforms.
    rng = np.random.default_rng(4)
    row, taps = rng.integers(-9999, 10_000, 3000), rng.integers(-99, 100, 65)
    wanted = [int(value) for value in np.convolve(row, taps)]
    if kind == "direct":
        out = direct(row[None].astype(float), taps.astype(float), "float64")[0]
        assert out.tolist() == wanted
        return
    out = overlap_add(row[None].astype(float), taps.astype(float), 960, 1024, "float64")[0]
    assert np.abs(out - wanted).max() < 1e-8
    assert np.rint(out).tolist() == wanted


def test_cancelling_sums_against_fifty_digits():
    # Alternate binomials take a cubic to 0: all that is left is rounding, bounded by |x| |h|.
    taps = np.array([1.0, -4, 6, -4, 1])
    x = (np.arange(200.0) / 7) ** 3
    with mpmath.workdps(50):
        for out, limit in [
            (direct(x[None], taps, "float64")[0], bound_of(taps, 1, 8, "float64")),
            (overlap_add(x[None], taps, 60, 64, "float64")[0], bound_of(taps, 60, 64, "float64")),
        ]:
            for n in range(4, 200):
                total = mpmath.fsum(mpmath.mpf(taps[k]) * mpmath.mpf(x[n - k]) for k in range(5))
                assert abs(mpmath.mpf(out[n]) - total) <= limit * np.linalg.norm(x)


# Relative errors of transforms of random complex input in units of u, as once observed, for
# N = 2^n: doubles, singles.
OBSERVED = {4: (0.99, 1.24), 6: (1.42, 1.48), 8: (1.66, 1.72), 10: (2.05, 1.88), 12: (2.25, 2.12),
            14: (2.52, 2.31), 16: (2.79, 2.48)}  # fmt: skip


def transform_error(n: int, precision: str, seed: int) -> float:
    rng = np.random.default_rng(seed)
    x = rng.standard_normal(1 << n) + 1j * rng.standard_normal(1 << n)
    x = x.astype(np.complex64 if precision == "float32" else np.complex128)
    true = scipy.fft.fft(x.astype(np.clongdouble))
    return float(np.linalg.norm(scipy.fft.fft(x) - true) / np.linalg.norm(true))


@pytest.mark.parametrize("precision", ["float32", "float64"])
@pytest.mark.parametrize("n", OBSERVED)
def test_transforms_stay_under_published_bounds(n, precision):
    u = UNIT[precision]
    found = max(transform_error(n, precision, seed) for seed in range(3))
    # Higham, theorem 24.2, with twiddles right to u / sqrt(2).
    mu = u / sqrt(2)
    eta = mu + 4 * u / (1 - 4 * u) * (sqrt(2) + mu)
    assert found <= n * eta / (1 - n * eta)
    # Brisebarre, Joldes, Muller, Nanes and Picot, ACM TOMS 46(2), article 11, 2020, with two
    # stages exact and products in error by sqrt(5) u at most.
    delta, rho = u / sqrt(2), sqrt(5) * u
    g = delta + rho * (1 + delta)
    assert found <= (1 + u) ** n * (1 + g) ** (n - 2) - 1
    # Schatzman, SIAM J. Sci. Comput. 17(5), 1150-1166, 1996 (from memory only): about
    # 0.6 eps sqrt(log2 N) for good twiddles; and near to what was observed before.
    assert found <= 0.6 * 2 * u * sqrt(n)
    observed = OBSERVED[n][0 if precision == "float64" else 1]
    assert found / u == pytest.approx(observed, rel=0.35)


@pytest.mark.parametrize(
    ("n", "higham", "brisebarre"), [(4, 25.5, 9.9), (10, 63.6, 33.5), (20, 127.3, 73.0)]
)
def test_sizes_of_the_published_bounds(n, higham, brisebarre):
    u = UNIT["float64"]
    eta = u / sqrt(2) + 4 * u * sqrt(2)
    assert n * eta / u == pytest.approx(higham, abs=0.06)
    assert n + (n - 2) * (1 / sqrt(2) + sqrt(5)) == pytest.approx(brisebarre, abs=0.06)
