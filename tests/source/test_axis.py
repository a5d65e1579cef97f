"""Whole-number arithmetic and the streamed check of the time axis, beside plain loops."""

from __future__ import annotations

import tracemalloc
from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from made_sources import MS, PLATE, START_NS, MadeStamps

from pipeline_filters.errors import SourceError
from pipeline_filters.source import axis_scan
from pipeline_filters.source.axis import (
    Axis,
    clock_number,
    clock_numbers,
    counted_axis,
)
from pipeline_filters.source.axis_scan import WINDOW_SAMPLES, scan_axis
from pipeline_filters.source.cf_time import TimeUnits
from pipeline_filters.source.exact import divided_half_even, scaled_half_even

SPLIT = replace(PLATE, breaks="split")
RATES = st.sampled_from(
    [
        *map(Fraction, (1000, 3, 44_100)),
        *(Fraction(1, 86_400), Fraction(99_997, 100), Fraction(1, 604_800)),
        *(Fraction(1_000_003, 7), Fraction(123_456_789_123, 10**9)),
    ]
)


def milliseconds(raw, chunk=64) -> MadeStamps:
    return MadeStamps(raw, TimeUnits.parse(MS), chunk)


# Whole numbers


@given(
    st.lists(st.integers(-(10**9), 10**9), min_size=1, max_size=10),
    st.integers(-(10**6), 10**6),
    st.integers(1, 10**6),
    st.integers(-(10**15), 10**15),
)
@settings(deadline=None)
def test_scaling_rounds_half_to_even(counts, top, bottom, base):
    got = scaled_half_even(
        np.array(counts), top, bottom, np.full(len(counts), base, np.int64)
    ).tolist()
    assert got == [round(Fraction(n * top, bottom) + base) for n in counts]


def test_scaling_with_factors_that_pass_64_bits():
    top, bottom = 3**45, 7**26
    counts = np.array([-5, 0, 1, 10**4])
    got = scaled_half_even(counts, top, bottom, np.zeros(4, np.int64)).tolist()
    assert got == [round(Fraction(int(n) * top, bottom)) for n in counts]


def test_division_rounds_half_to_even():
    assert [divided_half_even(n, 2) for n in (-3, -1, 1, 3, 5)] == [-2, 0, 0, 2, 2]
    assert clock_number(500_000_000, Fraction(1)) == 0
    assert clock_number(1_500_000_000, Fraction(1)) == 2


@given(RATES, st.lists(st.integers(-9 * 10**18, 9 * 10**18), min_size=1, max_size=10))
@settings(deadline=None)
def test_clock_numbers(rate_hz, stamps_ns):
    wanted = [round(Fraction(ns, 10**9) * rate_hz) for ns in stamps_ns]
    assert clock_numbers(np.array(stamps_ns), rate_hz).tolist() == wanted
    assert [clock_number(ns, rate_hz) for ns in stamps_ns] == wanted


@given(RATES, st.data())
@settings(deadline=None, max_examples=50)
def test_computed_stamps(rate_hz, data):
    lengths = np.array(data.draw(st.lists(st.integers(1, 50), min_size=1, max_size=5)), np.int64)
    starts = np.cumsum(lengths) - lengths
    firsts = np.array(data.draw(st.lists(st.integers(0, 10**18), min_size=5, max_size=5)))
    firsts = firsts[: lengths.size]
    total = int(lengths.sum())
    axis = Axis("stamped", rate_hz, starts, lengths, firsts, starts, 0.0, total)
    start = data.draw(st.integers(0, total - 1))
    stop = data.draw(st.integers(start, total))
    half = data.draw(st.integers(-3, 3))
    wanted = []
    for begin, length, first in zip(starts, lengths, firsts, strict=True):
        for index in range(max(start, begin), min(stop, begin + length)):
            steps = Fraction(2 * int(index - begin) + half, 2)
            wanted.append(round(int(first) + steps * 10**9 / rate_hz))
    assert axis.stamps_at(start, stop, half).tolist() == wanted


# The scan


def plain_scan(stamps_ns, step_ns, slack_ns):
    """Stretches by a loop over steps: (start, length) pairs; None where time goes back."""
    starts = [0]
    for index in range(1, len(stamps_ns)):
        step = stamps_ns[index] - stamps_ns[index - 1]
        if step < 0:
            return None
        if abs(step - step_ns) > slack_ns:
            starts.append(index)
    return [(a, b - a) for a, b in zip(starts, [*starts[1:], len(stamps_ns)], strict=True)]


STEPS = st.one_of(
    st.integers(880, 1120),  # about a tenth off
    st.just(1000),
    st.sampled_from([0, 37_000, 5_000, 899, 900, 901, 1099, 1100, 1101]),
)


@given(
    st.lists(STEPS, min_size=3, max_size=60),
    st.integers(1, 70),
    st.sampled_from(["i8", "i4", "u8", "f8"]),
)
@settings(deadline=None)
def test_stretches_beside_a_loop_over_steps(steps, chunk, dtype):
    # More regular steps than irregular ones, else the rate disagrees.
    microseconds = np.cumsum([0, *steps, *[1000] * len(steps)])
    units = TimeUnits("stamped", 1000, START_NS)
    stamps_ns = (microseconds * 1000 + START_NS).tolist()
    slack_ns = Fraction(10**5) + units.resolution_ns(
        microseconds[[0, -1]].astype(dtype), Fraction(10**6)
    )
    wanted = plain_scan(stamps_ns, 10**6, slack_ns)
    axis = scan_axis(MadeStamps(microseconds.astype(dtype), units, chunk), len(stamps_ns), SPLIT)
    assert list(zip(axis.starts.tolist(), axis.lengths.tolist(), strict=True)) == wanted
    assert axis.first_ns.tolist() == [stamps_ns[start] for start, _ in wanted]
    assert axis.numbers.tolist() == [clock_number(stamps_ns[s], PLATE.rate_hz) for s, _ in wanted]
    assert axis.length == len(stamps_ns)


@pytest.mark.parametrize("dtype", ["i8", "f8"])
def test_chunks_do_not_matter_and_little_is_read_at_once(monkeypatch, dtype):
    rng = np.random.default_rng(5)
    steps = np.ones(300_000, np.int64)
    at = np.sort(rng.choice(np.arange(1, steps.size), 40, replace=False))
    at = np.sort(np.concatenate([at, [WINDOW_SAMPLES, WINDOW_SAMPLES + 1, 2 * WINDOW_SAMPLES - 1]]))
    steps[at] = 37
    steps[0] = 0
    raw = np.cumsum(steps).astype(dtype)
    monkeypatch.setattr(axis_scan, "READ_SAMPLES", 1)
    for chunk in (1 << 14, 65_537, 100_000, 10**9):
        stamps = milliseconds(raw, chunk)
        axis = scan_axis(stamps, raw.size, SPLIT)
        assert axis.starts[1:].tolist() == at.tolist()
        assert axis.first_ns[1:].tolist() == (raw[at].astype("i8") * 10**6 + START_NS).tolist()
        assert stamps.largest_read <= chunk


def test_one_sample_and_two():
    axis = scan_axis(milliseconds([5]), 1, PLATE)
    assert (axis.starts.tolist(), axis.lengths.tolist(), axis.drift_ppm) == ([0], [1], 0.0)
    assert axis.first_ns.tolist() == [START_NS + 5 * 10**6]
    assert scan_axis(milliseconds([5, 6]), 2, PLATE).lengths.tolist() == [2]
    assert scan_axis(milliseconds([5, 60]), 2, SPLIT).lengths.tolist() == [1, 1]


def test_a_counted_axis():
    axis = counted_axis(7, PLATE)
    assert axis.kind == "counted"
    assert (axis.starts.tolist(), axis.lengths.tolist(), axis.numbers.tolist()) == ([0], [7], [0])


def test_a_jump_is_refused_or_splits():
    raw = np.arange(200) + np.where(np.arange(200) >= 120, 37_000, 0)
    with pytest.raises(SourceError) as refused:
        scan_axis(milliseconds(raw), 200, PLATE)
    assert str(refused.value) == (
        "velocity, coordinate time, sample 120, 2026-03-01T00:00:37.12: the axis jumps: the step "
        "is 37.001 s; steps of 0.001 s within a tenth; state breaks: split, or mend the axis"
    )
    axis = scan_axis(milliseconds(raw), 200, SPLIT)
    assert axis.lengths.tolist() == [120, 80]
    assert axis.numbers.tolist() == [START_NS // 10**6, START_NS // 10**6 + 37_120]


def test_a_repeated_stamp_is_a_break():
    raw = np.r_[0:50, 49:100]
    with pytest.raises(SourceError, match=r"sample 50, .*the stamp repeats"):
        scan_axis(milliseconds(raw), 101, PLATE)
    assert scan_axis(milliseconds(raw), 101, SPLIT).lengths.tolist() == [50, 51]


def test_many_breaks_are_shown_in_part_and_counted():
    raw = np.arange(1000) + np.arange(1000) // 100
    with pytest.raises(SourceError) as refused:
        scan_axis(milliseconds(raw), 1000, PLATE)
    lines = str(refused.value).splitlines()
    assert [line.split(", ")[2] for line in lines[:5]] == [f"sample {n}00" for n in range(1, 6)]
    assert lines[5:] == ["velocity, coordinate time: 4 more irregular steps"]


def test_backward_stamps_are_refused_even_when_splitting():
    raw = np.arange(300)
    raw[50:] += 7
    raw[100:] -= 50
    with pytest.raises(SourceError) as refused:
        scan_axis(milliseconds(raw), 300, SPLIT)
    first, more = str(refused.value).splitlines()
    assert "sample 100, " in first
    assert "time goes back: the step is -0.049 s" in first
    assert "1 more" in more


@pytest.mark.parametrize("breaks", ["refuse", "split"])
@pytest.mark.parametrize("length", [3, 200, 2 * WINDOW_SAMPLES + 1500])
def test_a_rate_that_disagrees_is_refused(breaks, length):
    with pytest.raises(
        SourceError, match=r"usual step is 0.002 s \(500 Hz\); the spec states 1 kHz"
    ):
        scan_axis(milliseconds(np.arange(length) * 2), length, replace(PLATE, breaks=breaks))


def test_a_rate_that_changes_on_the_way_is_refused():
    raw = np.cumsum(np.r_[np.ones(3 * WINDOW_SAMPLES, int), np.full(WINDOW_SAMPLES, 2)])
    with pytest.raises(SourceError, match=f"samples {3 * WINDOW_SAMPLES} to {raw.size}: the usual"):
        scan_axis(milliseconds(raw, 10**6), raw.size, SPLIT)


def test_an_axis_without_any_rate_is_refused():
    raw = np.cumsum(np.random.default_rng(1).integers(2, 10**6, 500))
    with pytest.raises(
        SourceError, match=r"499 of 499 steps are irregular, from .* to .*even axis"
    ):
        scan_axis(milliseconds(raw), 500, SPLIT)
    with pytest.raises(SourceError, match="sort the source by time"):
        scan_axis(milliseconds(raw[::-1].copy()), 500, SPLIT)


def test_a_mean_rate_that_disagrees_is_refused():
    # 150 ppm fast, which no single step shows.
    raw = np.arange(2000) * 1000 / 1.00015
    units = TimeUnits("stamped", 1000, START_NS)
    with pytest.raises(SourceError, match=r"2000 samples from .*\+150.\d ppm off the stated 1 kHz"):
        scan_axis(MadeStamps(raw, units, 64), 2000, PLATE)
    tolerant = replace(PLATE, rate_tolerance=Fraction(200, 10**6))
    assert scan_axis(MadeStamps(raw, units, 64), 2000, tolerant).drift_ppm == pytest.approx(
        150, 0.01
    )
    # Short stretches are not judged by their mean.
    assert scan_axis(MadeStamps(raw[:999], units, 64), 999, PLATE).drift_ppm == 0


def test_every_long_stretch_is_judged():
    steps = np.r_[np.full(1500, 1000), 10**6, np.full(1500, 1001), 10**6, np.full(1500, 1000)]
    units = TimeUnits("stamped", 1000, START_NS)
    with pytest.raises(SourceError, match=r"1501 samples from .*-999.0 ppm"):
        scan_axis(MadeStamps(np.cumsum(steps), units, 100), steps.size, SPLIT)


def test_stamps_too_coarse_for_the_rate_are_refused():
    seconds = TimeUnits.parse("seconds since 2026-03-01")
    raw = np.arange(5000) // 1000
    with pytest.raises(SourceError, match=r"stamps are only 1 s fine, but a sample lasts 0\.001 s"):
        scan_axis(MadeStamps(raw, seconds, 64), 5000, SPLIT)
    floats = np.float32(1.7e9) + np.arange(5000, dtype="f4")
    with pytest.raises(SourceError, match="finer than a sample"):
        scan_axis(MadeStamps(floats, seconds, 64), 5000, SPLIT)
    # Fine in type, coarse in fact.
    with pytest.raises(SourceError, match="most stamps repeat"):
        scan_axis(milliseconds(raw * 1000), 5000, SPLIT)


def test_rounded_stamps_are_even_within_their_resolution():
    third = replace(PLATE, rate_hz=Fraction(300), rate_text="300 Hz")
    raw = np.rint(np.arange(3000) / 0.3).astype(int)
    axis = scan_axis(milliseconds(raw), 3000, third)
    assert axis.lengths.tolist() == [3000]
    assert axis.drift_ppm < 100


@pytest.mark.parametrize("at", [0, 63, 64, 150, 199])
@pytest.mark.parametrize("marker", [np.nan, -9999.0, 1e20])
def test_a_missing_stamp_is_refused_with_its_place(at, marker):
    raw = np.arange(200.0)
    raw[at] = marker
    units = TimeUnits.parse(MS).with_markers((-9999.0, 1e20))
    with pytest.raises(SourceError, match=f"coordinate time, sample {at}: a missing stamp"):
        scan_axis(MadeStamps(raw, units, 64), 200, SPLIT)


def test_a_marker_that_looks_like_a_stamp_is_missing():
    units = TimeUnits.parse(MS).with_markers((20,))
    with pytest.raises(SourceError, match="sample 20: a missing stamp"):
        scan_axis(MadeStamps(np.arange(200), units, 64), 200, PLATE)


def test_a_far_stamp_is_refused():
    seconds = replace(PLATE, rate_hz=Fraction(1), rate_text="1 Hz")
    raw = np.arange(200) + 9_223_372_000
    with pytest.raises(SourceError, match=r"sample \d+: stamp \d+; the years 1678 to 2262"):
        scan_axis(MadeStamps(raw, TimeUnits("stamped", 10**9, 0), 64), 200, seconds)


def test_wrapping_differences_are_no_steps():
    units = TimeUnits("stamped", 1, 0)
    rate = replace(PLATE, rate_hz=Fraction(10**9, 2**20), rate_text="954 Hz", breaks="split")
    raw = np.array([2**31 - 2**19, -(2**31) + 2**19], "i4")  # 2^20 apart, in 32 bits
    with pytest.raises(SourceError, match="goes back"):
        scan_axis(MadeStamps(raw, units, 64), 2, rate)


def test_many_breaks_are_arrays_and_memory_stays_flat():
    count = 2_000_000
    raw = np.arange(count) + np.arange(count) // 4  # half a million breaks
    stamps = milliseconds(raw, 1 << 16)
    tracemalloc.start()
    axis = scan_axis(stamps, count, SPLIT)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert axis.starts.size == count // 4
    # Four numbers a break are kept, some ten are gathered on the way; and a few megabytes.
    assert peak < 120 * axis.starts.size + 2**24
    tracemalloc.start()
    scan_axis(milliseconds(np.arange(count), 1 << 16), count, SPLIT)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    # One array of all stamps, or of anything else of that length, would be 16 MB.
    assert peak < 4 * 2**20 + raw.nbytes
