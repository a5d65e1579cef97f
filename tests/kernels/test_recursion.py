"""Recursions against scipy on whole arrays, extended precision, and what dies away."""

from __future__ import annotations

from itertools import pairwise

import mpmath
import numpy as np
import pytest
from scipy.signal import butter, iirnotch, lfilter, sosfilt, sosfilt_zi

from pipeline_filters.design.impulse import settling_samples
from pipeline_filters.design.merging import AT_REST
from pipeline_filters.kernels.recursion import CALM_BELOW, CALM_GRID, Recursion
from pipeline_filters.kernels.slab import Slab, join_slabs

PAD = {
    "hold": {"mode": "edge"},
    "even": {"mode": "reflect"},
    "odd": {"mode": "reflect", "reflect_type": "odd"},
}


def kernel(rows, sections, rule="zero", settle=0, start=0, rest=None):
    rest = settling_samples(sections, AT_REST) if rest is None else rest
    return Recursion(rows, sections, rest=rest, settle=settle, rule=rule, start=start)


def run(recursion, rows, missing=None) -> Slab:
    return join_slabs([recursion.push(Slab(rows, missing)), recursion.finish()])


@pytest.mark.parametrize("order", [1, 2, 6])
def test_results_are_those_of_scipy(order):
    sections = butter(order, 0.2, output="sos")
    rows = np.random.default_rng(order).standard_normal((3, 40_000))
    out = run(kernel(3, sections), rows)
    assert out.missing is None
    np.testing.assert_array_equal(out.values, sosfilt(sections, rows, axis=1))
    b, a = butter(order, 0.2)
    np.testing.assert_allclose(out.values, lfilter(b, a, rows, axis=1), rtol=0, atol=1e-11)


def test_a_notch_against_thirty_digits():
    b, a = iirnotch(50, 25, fs=1000)
    section = np.array([[*b, *a]])
    row = np.random.default_rng(3).standard_normal(2000)
    out = run(kernel(1, section), row[None]).values[0]
    with mpmath.workdps(30):
        b0, b1, b2, _, a1, a2 = (mpmath.mpf(float(value)) for value in section[0])
        x = [mpmath.mpf(0)] * 2 + [mpmath.mpf(float(value)) for value in row]
        y = [mpmath.mpf(0)] * 2
        for n in range(2, len(x)):
            taken = b0 * x[n] + b1 * x[n - 1] + b2 * x[n - 2]
            y.append(taken - a1 * y[n - 1] - a2 * y[n - 2])
        error = max(abs(float(mpmath.mpf(float(out[n])) - y[n + 2])) for n in range(2000))
    assert error < 1e-13


@pytest.mark.parametrize("rule", PAD)
def test_a_start_from_rest_over_an_extension(rule):
    sections = butter(3, 0.1, output="sos")
    rest = settling_samples(sections, AT_REST)
    rows = 4 + np.random.default_rng(1).standard_normal((2, 1500))
    out = run(kernel(2, sections, rule), rows).values
    known = np.pad(rows, [(0, 0), (rest, 0)], **PAD[rule])
    np.testing.assert_allclose(out, sosfilt(sections, known, axis=1)[:, rest:], rtol=0, atol=1e-13)
    # Twice as long an extension changes nothing that counts.
    known = np.pad(rows, [(0, 0), (2 * rest, 0)], **PAD[rule])
    np.testing.assert_allclose(
        out, sosfilt(sections, known, axis=1)[:, 2 * rest :], rtol=0, atol=1e-10
    )


def test_hold_is_the_steady_state_of_the_first_sample():
    # The same start as scipy.signal.sosfilt_zi's (common practice).
    sections = butter(3, 0.1, output="sos")
    row = 4 + np.random.default_rng(1).standard_normal(1500)
    out = run(kernel(1, sections, "hold"), row[None]).values[0]
    wanted, _ = sosfilt(sections, row, zi=sosfilt_zi(sections) * row[0])
    np.testing.assert_allclose(out, wanted, rtol=0, atol=1e-10)


@pytest.mark.parametrize("rule", ["zero", "blank", *PAD])
def test_it_restarts_after_missing_samples(rule):
    sections = butter(2, 0.2, output="sos")
    rest, settle = settling_samples(sections, AT_REST), settling_samples(sections, 1e-3)
    assert 5 < settle < 40
    rng = np.random.default_rng(4)
    rows = 2 + rng.standard_normal((2, 900))
    missing = np.zeros((2, 900), bool)
    missing[0, 300:304] = True
    missing[0, 500] = True
    stood_in = np.where(missing, 0, rows)
    out = run(kernel(2, sections, rule, settle), stood_in, missing)

    def from_rest(part):
        before = 0 if rule in ("zero", "blank") else rest
        known = np.pad(part, (before, 0), **PAD.get(rule, {"mode": "constant"}))
        return sosfilt(sections, known)[before:]

    gone = np.zeros((2, 900), bool)
    if rule == "blank":
        gone[:, :settle] = True
    gone[0, 300 : 304 + settle] = True
    gone[0, 500 : 501 + settle] = True
    np.testing.assert_array_equal(
        np.zeros((2, 900), bool) if out.missing is None else out.missing, gone
    )
    for begin, end in [(0, 300), (304, 500), (501, 900)]:
        kept = ~gone[0, begin:end]
        wanted = from_rest(rows[0, begin:end])[kept]
        np.testing.assert_allclose(out.values[0, begin:end][kept], wanted, rtol=0, atol=1e-13)
    kept = ~gone[1]
    np.testing.assert_allclose(out.values[1][kept], from_rest(rows[1])[kept], rtol=0, atol=1e-13)


def test_what_stands_in_for_a_missing_sample_leaves_no_trace():
    sections = butter(2, 0.2, output="sos")
    rows = np.random.default_rng(5).standard_normal((1, 400))
    missing = np.zeros((1, 400), bool)
    missing[0, 100] = True
    outs = []
    for stand_in in (0.0, 1e37):
        rows[0, 100] = stand_in
        outs.append(run(kernel(1, sections, "even", 7), rows.copy(), missing))
    assert outs[0].values.tobytes() == outs[1].values.tobytes()
    np.testing.assert_array_equal(outs[0].missing, outs[1].missing)


def dead_after_an_impulse(length: int) -> np.ndarray:
    rows = np.zeros((2, length))
    rows[:, 3] = 1
    rows[1, -1] = 1  # the second channel comes back at the very end
    return rows


def test_dead_channels_come_to_exactly_zero():
    # One pole at 0.95 falls by 1e-200 in some 9,000 samples, and would be denormal (below
    # 2.2e-308) from some 13,800 on, which many processors handle slowly (common practice).
    sections = np.array([[1.0, 0, 0, 1, -0.95, 0]])
    length = 3 * CALM_GRID
    plain, state = sosfilt(sections, dead_after_an_impulse(length)[:1], zi=np.zeros((1, 1, 2)))
    assert 0 < plain[0, CALM_GRID - 1] < np.finfo(float).tiny
    assert 0 < state[0, 0, 0] < np.finfo(float).tiny  # without calming it never ends
    recursion = kernel(2, sections)
    out = recursion.push(Slab(dead_after_an_impulse(length))).values
    assert not recursion.state[:, 0].any()
    assert recursion.state[:, 1].any()
    assert not out[0, CALM_GRID:].any()
    np.testing.assert_array_equal(out[0, :CALM_GRID], plain[0, :CALM_GRID])
    assert out[1, -1] == 1


def test_calming_touches_nothing_above_its_limit():
    # A pole so slow that the state is still above the limit at the first grid point.
    sections = butter(2, 0.01, output="sos")
    rows = dead_after_an_impulse(2 * CALM_GRID)
    recursion = kernel(2, sections)
    out = recursion.push(Slab(rows[:, :CALM_GRID])).values
    assert np.abs(recursion.state).max() > CALM_BELOW
    out = np.concatenate([out, recursion.push(Slab(rows[:, CALM_GRID:])).values], axis=1)
    np.testing.assert_array_equal(out, sosfilt(sections, rows, axis=1))


@pytest.mark.parametrize("start", [0, 777, -5000, 10**12 + 1])
def test_calming_is_on_the_clocks_grid_whatever_the_cut(start):
    sections = np.array([[1.0, 0, 0, 1, -0.95, 0]])
    rows = dead_after_an_impulse(2 * CALM_GRID + 500)
    whole = kernel(2, sections, start=start)
    wanted = whole.push(Slab(rows)).values
    cut = kernel(2, sections, start=start)
    edges = [0, 1, 9000, CALM_GRID - 1, CALM_GRID, CALM_GRID + 5607, rows.shape[1]]
    parts = [cut.push(Slab(rows[:, a:b])).values for a, b in pairwise(edges)]
    assert np.concatenate(parts, axis=1).tobytes() == wanted.tobytes()
    assert cut == whole
    assert not whole.state[:, 0].any()
