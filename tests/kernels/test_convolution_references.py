"""Convolution against published facts, and chains against scipy on whole arrays."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest
from scipy.signal import butter, fftconvolve, firwin, lfilter, oaconvolve, sosfilt, sosfiltfilt

from pipeline_filters.chain.blocks import block_rule
from pipeline_filters.chain.building import build_chain
from pipeline_filters.chain.model import Chain, TapsStage
from pipeline_filters.design.contract import SectionsResponse
from pipeline_filters.design.merging import AT_REST
from pipeline_filters.kernels.missing import mark_with_nan
from pipeline_filters.kernels.overlap_add import OverlapAdd
from pipeline_filters.source.decoding import Decoding
from pipeline_filters.spec.model import Amount, Blocks, Result, Signal, Spec
from pipeline_filters.stream import whole_stretch

KHZ = Fraction(1000)
PAD = {
    "zero": {"mode": "constant"},
    "hold": {"mode": "edge"},
    "even": {"mode": "reflect"},
    "odd": {"mode": "reflect", "reflect_type": "odd"},
}


def full(row, taps, hop, transform):
    kernel = OverlapAdd(
        1, np.array(taps, float), hop=hop, transform=transform, start=0, emit_from=0,
        dtype=np.dtype(np.float64),
    )  # fmt: skip
    padded = np.concatenate([np.array(row, float), np.zeros(len(taps) - 1)])[None]
    return np.concatenate([kernel.push(padded), kernel.finish()], axis=1)[0]


def circular(row, taps, size):
    return np.fft.ifft(np.fft.fft(row, size) * np.fft.fft(taps, size)).real


def folded(linear, size):
    """A linear convolution wrapped round in time."""
    out = np.zeros(size)
    for n, value in enumerate(linear):
        out[n % size] += value
    return out


SMOOTHER = np.array([1, 4, 6, 4, 1]) / 16
EDGE = np.array([1, 5, 11, 15]) / 16


@pytest.mark.parametrize(
    ("row", "taps", "size", "wrapped"),
    [
        # Proakis and Manolakis, 3rd ed., examples 5.3.2 and 5.2.1 (from memory, recomputed).
        ([1, 2, 2, 1], [1, 2, 3], 4, [9, 7, 9, 11]),
        ([2, 1, 2, 1], [1, 2, 3, 4], 4, [14, 16, 14, 16]),
        # Linear = circular from N = L + P - 1 on (Oppenheim and Schafer, section 8.7; Proakis
        # and Manolakis, section 7.3): twelve ones through the binomial smoother (recomputed).
        (np.ones(12), SMOOTHER, 12, np.ones(12)),
        (np.ones(12), SMOOTHER, 16, [*EDGE, *np.ones(8), *EDGE[::-1]]),
    ],
)
def test_what_a_short_transform_wraps_round(row, taps, size, wrapped):
    np.testing.assert_allclose(circular(row, taps, size), wrapped, atol=1e-14)
    for hop in (2, 3, 8, 64):
        linear = full(row, taps, hop, hop + len(taps) - 1)
        np.testing.assert_allclose(folded(linear, size), wrapped, atol=1e-13)
        if size >= len(row) + len(taps) - 1:
            np.testing.assert_allclose(linear, wrapped, atol=1e-14)


def test_which_results_of_a_short_transform_are_right():
    # Overlap-save: of N circular results the first P - 1 are wrong, the other N - P + 1
    # right (Oppenheim and Schafer, section 8.7).
    rng = np.random.default_rng(1)
    row, taps = rng.standard_normal(300), rng.standard_normal(21)
    linear = full(row, taps, 44, 64)
    for start in (0, 100, 236):
        near = np.abs(circular(row[start : start + 64], taps, 64) - linear[start : start + 64])
        assert (near[20:] < 1e-13).all()
        assert (near[:20] > 1e-6).any()


def chain_of(taps, lead, ends, *, hop=None, precision="float64") -> Chain:
    amount = None if hop is None else Amount(f"{hop} samples", samples=Fraction(hop))
    blocks = Blocks(hop=amount, precision=precision)
    hop, transform = block_rule(taps.size, blocks, KHZ, waiting=0, result="calm")
    stage = TapsStage(taps, lead, taps.size - 1 - lead, lead, 0, hop, transform)
    return Chain((stage,), KHZ, "causal", ends, precision, 0, None)


@pytest.mark.parametrize("hop", [None, 1, 50, 1000])
@pytest.mark.parametrize("p", [1, 2, 63, 500])
def test_results_are_those_of_scipy(p, hop):
    rng = np.random.default_rng(p)
    rows, taps = rng.standard_normal((3, 5000)), rng.standard_normal(p)
    out = whole_stretch(chain_of(taps, 0, "zero", hop=hop), rows, number=12_345).values
    scale = np.linalg.norm(rows) * np.linalg.norm(taps)
    for wanted in (
        oaconvolve(rows, taps[None], axes=1)[:, :5000],
        fftconvolve(rows, taps[None], axes=1)[:, :5000],
        lfilter(taps, 1, rows, axis=1),
    ):
        np.testing.assert_allclose(out, wanted, rtol=0, atol=1e-15 * scale)
    if p % 2:
        centred = whole_stretch(chain_of(taps, p // 2, "zero", hop=hop), rows).values
        wanted = oaconvolve(rows, taps[None], mode="same", axes=1)
        np.testing.assert_allclose(centred, wanted, rtol=0, atol=1e-15 * scale)


@pytest.mark.parametrize("precision", ["float64", "float32"])
@pytest.mark.parametrize("length", [700, 60, 7, 2, 1])
@pytest.mark.parametrize("lead", [0, 20, 40])
@pytest.mark.parametrize("ends", PAD)
def test_every_ends_rule_is_that_of_numpy_pad(ends, lead, length, precision):
    # Where the stretch is shorter than the reach, numpy.pad repeats reflection as well.
    rng = np.random.default_rng(length)
    rows, taps = 5 + rng.standard_normal((2, length)), firwin(41, 0.2) + 0.01
    rows = rows.astype(precision).astype(float)
    padded = np.pad(rows, [(0, 0), (40 - lead, lead)], **PAD[ends])
    wanted = fftconvolve(padded, taps[None], mode="valid", axes=1)
    chain = chain_of(taps, lead, ends, hop=64, precision=precision)
    found = whole_stretch(chain, rows.astype(precision))
    assert found.missing is None
    assert found.values.dtype == precision
    atol = 1e-13 if precision == "float64" else 4e-5
    scale = max(1, np.abs(padded).max() / 8)
    np.testing.assert_allclose(found.values, wanted, rtol=0, atol=atol * scale)


@pytest.mark.parametrize("lead", [0, 20, 40])
def test_blank_ends_mark_what_passes_them_and_nothing_else(lead):
    rng = np.random.default_rng(9)
    rows, taps = rng.standard_normal((2, 300)), rng.standard_normal(41)
    found = whole_stretch(chain_of(taps, lead, "blank"), rows)
    inside = slice(40 - lead, 300 - lead)
    wanted = np.ones((2, 300), bool)
    wanted[:, inside] = False
    np.testing.assert_array_equal(found.missing, wanted)
    valid = fftconvolve(rows, taps[None], mode="valid", axes=1)
    np.testing.assert_allclose(found.values[:, inside], valid, atol=1e-12)
    short = whole_stretch(chain_of(taps, lead, "blank"), rows[:, :40])
    assert short.missing is not None
    assert short.missing.all()


@pytest.mark.parametrize("hop", [1, 50, None])
@pytest.mark.parametrize("lead", [0, 17, 32])
def test_one_missing_sample_marks_exactly_its_support(lead, hop):
    p, at = 33, 500
    rng = np.random.default_rng(6)
    rows, taps = rng.standard_normal((3, 1200)), rng.standard_normal(p)
    chain = chain_of(taps, lead, "zero", hop=hop)
    holed, zeroed = rows.copy(), rows.copy()
    holed[1, at], zeroed[1, at] = np.nan, 0
    out = whole_stretch(chain, holed)
    wanted = np.zeros((3, 1200), bool)
    wanted[1, at - lead : at - lead + p] = True
    assert wanted.sum() == p
    np.testing.assert_array_equal(out.missing, wanted)
    # All others have the bits that they have without it.
    whole = whole_stretch(chain, zeroed).values
    assert out.values[~wanted].tobytes() == whole[~wanted].tobytes()
    assert np.isfinite(out.values).all()


@pytest.mark.parametrize("precision", ["float64", "float32"])
def test_one_large_marker_leaves_no_trace_elsewhere(precision):
    # A marker in a transform would spoil its whole block; told on raw values, it never
    # enters one.
    p, at = 129, 2000
    rng = np.random.default_rng(7)
    raw, taps = rng.standard_normal((2, 5000)).astype(np.float32), firwin(p, 0.1)
    marker = np.float32(1e37)
    zeroed = raw.copy()
    raw[0, at], zeroed[0, at] = marker, 0
    chain = chain_of(taps, 64, "zero", precision=precision)
    decoded = Decoding(markers=(float(marker),)).decode(raw, chain.dtype)
    out = mark_with_nan(whole_stretch(chain, decoded), chain.dtype)
    marked = np.isnan(out)
    assert marked[0].sum() == p
    assert marked[0, at - 64 : at + 65].all()
    assert not marked[1].any()
    whole = whole_stretch(chain, zeroed).values
    assert out[~marked].tobytes() == whole[~marked].tobytes()
    # For comparison: taken as a number, it drowns results that it does not reach.
    naive = oaconvolve(raw.astype(np.float64), taps[None], mode="same", axes=1)
    assert np.abs(naive - whole)[~marked].max() > 1e6


def zero_phase_chain(sections, ends, settle=1e-3) -> Chain:
    signal = Signal("plate", "velocity", "time", KHZ, "1 kHz")
    result = Result("calm", "plate", ("b",), "zero-phase", ends)
    spec = Spec("", "w.yaml", "", {"plate": signal}, {}, {"calm": result}, Blocks())
    return build_chain(spec, result, [SectionsResponse(sections, settle)])


@pytest.mark.parametrize(("order", "corner"), [(2, 0.1), (4, 0.3), (6, 0.05)])
def test_zero_phase_is_forward_and_backward_over_endless_zeros(order, corner):
    sections = butter(order, corner, output="sos")
    rng = np.random.default_rng(order)
    rows = rng.standard_normal((2, 2500))
    out = whole_stretch(zero_phase_chain(sections, "zero"), rows).values
    far = 4000
    long = np.pad(rows, [(0, 0), (far, far)])
    forward = sosfilt(sections, long, axis=1)
    both = sosfilt(sections, forward[:, ::-1], axis=1)[:, ::-1]
    np.testing.assert_allclose(out, both[:, far:-far], rtol=0, atol=2e-11)
    by_scipy = sosfiltfilt(sections, long, axis=1, padtype=None)
    np.testing.assert_allclose(out, by_scipy[:, far:-far], rtol=0, atol=2e-11)


@pytest.mark.parametrize(("ends", "padtype"), [("hold", "constant"), ("even", "even"),
                                               ("odd", "odd")])  # fmt: skip
def test_zero_phase_with_extended_ends_is_that_of_sosfiltfilt(ends, padtype):
    sections = butter(3, 0.2, output="sos")
    chain = zero_phase_chain(sections, ends)
    stage = chain.stages[0]
    assert isinstance(stage, TapsStage)
    reach = stage.lead
    assert reach < 500
    rng = np.random.default_rng(12)
    rows = 3 + rng.standard_normal((2, 2500))
    out = whole_stretch(chain, rows).values
    # Padded far beyond the reach, its own way of starting has died away.
    wanted = sosfiltfilt(sections, rows, axis=1, padtype=padtype, padlen=3 * reach)
    np.testing.assert_allclose(out, wanted, rtol=0, atol=1e-10)


def test_two_sided_taps_are_cut_where_they_are_at_rest():
    sections = butter(4, 0.3, output="sos")
    stage = zero_phase_chain(sections, "zero").stages[0]
    assert isinstance(stage, TapsStage)
    np.testing.assert_array_equal(stage.taps, stage.taps[::-1])
    impulse = np.zeros(4 * stage.taps.size)
    impulse[impulse.size // 2] = 1
    endless = sosfiltfilt(sections, impulse, padtype=None)
    middle = slice(impulse.size // 2 - stage.lead, impulse.size // 2 + stage.lead + 1)
    np.testing.assert_allclose(stage.taps, endless[middle], rtol=0, atol=AT_REST)
    left_out = np.abs(endless).sum() - np.abs(endless[middle]).sum()
    assert left_out <= 3 * AT_REST * np.abs(endless).sum()
