"""Chains: the block rule against published costs, timing, and the bound on rounding."""

from __future__ import annotations

from fractions import Fraction
from math import ceil, e, log2

import numpy as np
import pytest
from scipy.special import lambertw

from pipeline_filters.chain.blocks import block_rule
from pipeline_filters.chain.building import build_chain
from pipeline_filters.design.contract import Response, SectionsResponse, TapsResponse
from pipeline_filters.errors import SpecError
from pipeline_filters.kernels.overlap_add import OverlapAdd
from pipeline_filters.spec.model import Amount, Blocks, Result, Signal, Spec
from pipeline_filters.stream import whole_stretch

KHZ = Fraction(1000)


def samples(count: int) -> Amount:
    return Amount(f"{count} samples", samples=Fraction(count))


def rule(taps: int, hop: int | None = None) -> tuple[int, int]:
    blocks = Blocks() if hop is None else Blocks(hop=samples(hop))
    return block_rule(taps, blocks, KHZ, waiting=0, result="calm")


def chain_of(*responses: Response, timing="causal", ends="zero", blocks=None):
    signal = Signal("plate", "velocity", "time", KHZ, "1 kHz")
    names = tuple(f"f{index}" for index, _ in enumerate(responses))
    result = Result("calm", "plate", names, timing, ends)
    spec = Spec("", "w.yaml", "", {"plate": signal}, {}, {"calm": result}, blocks or Blocks())
    return build_chain(spec, result, responses)


def cost(taps: int, transform: int) -> float:
    """Complex multiplications a sample: N log2(2N) / (N - P + 1).

    One pair of N-point transforms a block, the taps' own transform kept (Proakis and
    Manolakis, section 6.2.2; the same in Wikipedia's article on overlap-save).
    """
    return transform * log2(2 * transform) / (transform - taps + 1)


def best_power(taps: int) -> int:
    return min((cost(taps, 1 << v), 1 << v) for v in range(2, 27) if 1 << v >= taps)[1]


# Proakis and Manolakis, 3rd ed., table 6.2: 128 taps, N = 2^v; the printed entries (from
# memory) and more digits by the formula.
COSTS = [(9, 13.3, 13.2987), (10, 12.6, 12.5574), (11, 12.8, 12.7933), (12, 13.4, 13.4160),
         (14, 15.1, 15.1172)]  # fmt: skip


@pytest.mark.parametrize(("v", "printed", "computed"), COSTS)
def test_the_textbook_cost_table(v, printed, computed):
    hop, transform = rule(128, hop=(1 << v) - 127)
    assert (hop, transform) == ((1 << v) - 127, 1 << v)
    assert cost(128, transform) == pytest.approx(computed, abs=5.1e-5)
    assert cost(128, transform) == pytest.approx(printed, abs=0.051)


def test_auto_takes_the_cheapest_transform_of_the_table():
    assert rule(128) == (897, 1024)
    assert best_power(128) == 1024
    # Wikipedia's example: 201 taps, N = 1024, 13.67.
    assert cost(201, 1024) == pytest.approx(13.669903, abs=1e-6)


# The best power of two by the formula, from these numbers of taps on (recomputed).
BEST = [(3, 8), (4, 16), (6, 32), (10, 64), (16, 128), (27, 256), (48, 512), (87, 1024),
        (159, 2048), (294, 4096), (548, 8192), (1026, 16384), (1929, 32768),
        (3642, 65536)]  # fmt: skip


@pytest.mark.parametrize(("taps", "transform"), BEST)
def test_where_the_best_power_of_two_changes(taps, transform):
    assert best_power(taps) == transform
    assert best_power(taps - 1) == transform // 2


def test_auto_costs_within_five_per_cent_of_the_best():
    # Below 87 taps the rule spends more on purpose: calls on short transforms cost time.
    for taps in [*range(87, 4000), 5001, 10_001, 50_000, 99_999, 131_072]:
        assert cost(taps, rule(taps)[1]) <= 1.05 * cost(taps, best_power(taps))


@pytest.mark.parametrize(
    ("taps", "optimum", "scipys"),
    [(128, 1105.0, 1120), (201, 1842.4, 1848), (1000, 10986.6, 11000), (10000, 135052.1, 135168)],
)
def test_auto_costs_within_five_per_cent_of_the_continuous_optimum(taps, optimum, scipys):
    # N* = -K W(-1/(2 e K)) (a comment in scipy.signal.oaconvolve), and the sizes that
    # scipy 1.17.1 chose (the last for 10,001 taps); K = P - 1.
    overlap = taps - 1
    found = -overlap * lambertw(-1 / (2 * e * overlap), k=-1).real
    assert found == pytest.approx(optimum, abs=0.06)
    assert cost(taps, rule(taps)[1]) <= 1.05 * cost(taps, ceil(found))
    assert cost(taps, rule(taps)[1]) <= 1.05 * cost(taps, scipys)


# Helms, IEEE Trans. Audio Electroacoust. AU-15, 85-90, 1967, repeated by Brigham, The Fast
# Fourier Transform, 1974, chapter 13 (from memory only): transforms by the number of taps.
HELMS = [(100, 199, 1024), (200, 299, 2048), (300, 599, 4096), (600, 999, 8192),
         (1000, 1999, 16384), (2000, 3999, 32768)]  # fmt: skip


@pytest.mark.parametrize(("low", "high", "transform"), HELMS)
def test_auto_never_costs_more_than_the_table_of_1967(low, high, transform):
    for taps in range(low, high + 1):
        assert cost(taps, rule(taps)[1]) <= 1.03 * cost(taps, transform)


def test_multiplications_of_a_whole_recording():
    # 32,000 samples and 100 taps, N log2 N multiplications a transform (recomputed): one
    # transform of all takes 1,507,328; blocks of 157 at N = 256 take 889,856.
    whole = 32_768
    assert 3 * whole * log2(whole) + whole == 1_507_328
    hop, transform = rule(100, hop=157)
    kernel = OverlapAdd(
        1, np.ones(100), hop=hop, transform=transform, start=0, emit_from=0,
        dtype=np.dtype(np.float64),
    )  # fmt: skip
    kernel.push(np.zeros((1, 32_000)))
    kernel.finish()
    blocks = kernel.block_start // hop
    assert (transform, blocks) == (256, 204)
    pair = 2 * transform * log2(transform)
    assert blocks * (pair + transform) + transform * log2(transform) == 889_856


@pytest.mark.parametrize("taps", [1, 2, 100, 128, 129, 1000, 131_072, 131_073, 400_000])
@pytest.mark.parametrize("hop", [None, 1, 2, 157, 1000, 4096])
def test_the_rule_as_stated(taps, hop):
    used, transform = rule(taps, hop)
    least = max(8 * taps, 1024) if 8 * taps <= 1 << 20 else 2 * taps
    least = least if hop is None else hop + taps - 1
    sizes = sorted(base << k for base in (1, 3) for k in range(24))
    assert transform == next(size for size in sizes if size >= least)
    assert used == (transform - taps + 1 if hop is None else hop)
    assert transform >= used + taps - 1


@pytest.mark.parametrize("count", [2, 4, 30])
def test_aligned_even_taps_stand_half_a_sample_later(count):
    # A line through symmetric taps that sum to 1 is read at the middle of their support.
    taps = np.hanning(count + 2)[1:-1]
    chain = chain_of(TapsResponse(taps / taps.sum(), True), timing="aligned", ends="odd")
    assert chain.half_sample
    assert chain.delay_samples == 0
    assert chain.support == (count // 2 - 1, count // 2)
    n = np.arange(200.0)
    out = whole_stretch(chain, n[None])
    assert out.missing is None
    assert out.values.shape == (1, 200)
    np.testing.assert_allclose(out.values[0], n + 0.5, atol=1e-11)


def test_two_even_sets_of_taps_stand_on_the_samples_again():
    mean = TapsResponse(np.full(4, 0.25), True)
    chain = chain_of(mean, mean, timing="aligned", ends="odd")
    assert not chain.half_sample
    n = np.arange(50.0)
    np.testing.assert_allclose(whole_stretch(chain, n[None]).values[0], n, atol=1e-12)


def test_a_causal_chain_states_its_delay():
    chain = chain_of(TapsResponse(np.ones(4), True), TapsResponse(np.ones(3), True))
    assert chain.delay_samples == Fraction(5, 2)
    assert chain_of(TapsResponse(np.array([1.0, 2]), False)).delay_samples is None


def test_aligned_refuses_what_has_no_constant_delay():
    sections = np.array([[1.0, 0, 0, 1, -0.5, 0]])
    with pytest.raises(SpecError) as caught:
        chain_of(
            TapsResponse(np.array([1.0, 2]), False),
            SectionsResponse(sections, 1e-3),
            timing="aligned",
        )
    assert len(caught.value.problems) == 2


def test_a_latency_caps_the_blocks():
    # Common practice: a block's first sample waits for its last.
    blocks = Blocks(latency=Amount("50 ms", seconds=Fraction(1, 20)))
    chain = chain_of(TapsResponse(np.ones(21), True), timing="aligned", blocks=blocks)
    assert chain.hold_back == 50
    with pytest.raises(SpecError, match=r"waits for 10 samples whatever its blocks"):
        chain_of(
            TapsResponse(np.ones(21), True),
            timing="aligned",
            blocks=Blocks(latency=Amount("9 ms", seconds=Fraction(9, 1000))),
        )
