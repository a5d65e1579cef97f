"""Units, epochs and stamps, beside pandas and exact fractions."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from pipeline_filters.source.calendars import days_from_1970
from pipeline_filters.source.cf_time import UNIT_NS, TimeUnitError, TimeUnits, stamp_text

DAY_NS = 86_400 * 10**9


def test_units_and_epochs():
    # The Unix epoch is Julian day 2440587.5; common practice.
    assert TimeUnits.parse("days since 1970-01-01") == TimeUnits("stamped", DAY_NS, 0)
    hours = TimeUnits.parse("hours since 1900-01-01T00:00:00Z")
    assert hours.to_ns(np.array([613_608]))[0] == 0  # 25567 days from 1900 to 1970
    assert TimeUnits.parse("ms").kind == "elapsed"
    assert TimeUnits.parse("Seconds  SINCE 1970-01-01").unit_ns == 10**9


@pytest.mark.parametrize(
    ("epoch", "as_pandas"),
    [
        ("1992-10-8 15:15:42.5 -6:00", "1992-10-08T15:15:42.5-06:00"),  # in the CF conventions
        ("1970-01-01 02:00 +02:00", "1970-01-01T00:00:00Z"),
        ("1970-1-1 5", "1970-01-01T05:00:00Z"),
        ("2026-03-01T00:00:00.000000001Z", "2026-03-01T00:00:00.000000001Z"),
        ("2026-03-01 00:00:00 UTC", "2026-03-01T00:00:00Z"),
        ("2000-02-29 23:59:59.123456789+0530", "2000-02-29T23:59:59.123456789+05:30"),
        ("1969-12-31 19:00:00.0 -05", "1970-01-01T00:00:00Z"),
    ],
)
def test_epochs_beside_pandas(epoch, as_pandas):
    units = TimeUnits.parse(f"seconds since {epoch}")
    assert units.epoch_ns == pd.Timestamp(as_pandas).as_unit("ns").value


@given(st.datetimes(min_value=pd.Timestamp("1678-01-01"), max_value=pd.Timestamp("2262-01-01")))
@settings(deadline=None)
def test_any_epoch_beside_pandas(moment):
    units = TimeUnits.parse(f"s since {moment.isoformat(sep=' ')}")
    assert units.epoch_ns == pd.Timestamp(moment).as_unit("ns").value


@given(st.dates())
@settings(deadline=None)
def test_days_beside_the_standard_library(date):
    days = days_from_1970(date.year, date.month, date.day, mixed=False)
    assert days == date.toordinal() - 719_163  # the ordinal of 1970-01-01


def test_the_mixed_calendar():
    # Thursday 4 October 1582 was followed by Friday 15 October; common practice.
    last = days_from_1970(1582, 10, 4, mixed=True)
    first = days_from_1970(1582, 10, 15, mixed=True)
    assert first - last == 1
    assert first == days_from_1970(1582, 10, 15, mixed=False)
    assert days_from_1970(1582, 10, 10, mixed=True) is None
    assert days_from_1970(1500, 2, 29, mixed=True) is not None  # a leap year for Julius only
    assert days_from_1970(1500, 2, 29, mixed=False) is None
    # 1 January of year 1 of the mixed calendar is two days before the proleptic one.
    mixed = TimeUnits.parse("days since 0001-01-01", "gregorian").epoch_ns
    proleptic = TimeUnits.parse("days since 0001-01-01", "proleptic_gregorian").epoch_ns
    assert proleptic - mixed == 2 * DAY_NS
    # The product passes 64 bits, the sum does not.
    noon = TimeUnits.parse("days since 0001-01-01", "proleptic_gregorian")
    assert noon.to_ns(np.array([719_162]))[0] == 0


@pytest.mark.parametrize(
    ("units", "calendar", "said"),
    [
        ("months since 2000-01-01", "standard", "no fixed length"),
        ("years", "standard", "no fixed length"),
        ("fortnights", "standard", "time unit 'fortnights'"),
        ("s since noon", "standard", "epoch 'noon'"),
        ("s since 2001-02-29", "standard", "which the calendar does not have"),
        ("s since 1582-10-10", "standard", "which the calendar does not have"),
        ("s since 2001-13-01", "standard", "which the calendar does not have"),
        ("s since 2001-01-01 24:00", "standard", "which the calendar does not have"),
        ("s since 2001-01-01 00:00:00.0000000001", "standard", "finer than a nanosecond"),
        ("s since 2001-01-01", "noleap", "calendar 'noleap'"),
        ("s since 2001-01-01", "360_day", "calendar '360_day'"),
        ("", "standard", "time unit ''"),
    ],
)
def test_units_that_are_refused(units, calendar, said):
    with pytest.raises(TimeUnitError, match=said):
        TimeUnits.parse(units, calendar)


def exact_ns(stamp, units: TimeUnits) -> int:
    return round(Fraction(stamp) * units.unit_ns + units.epoch_ns)


@given(
    st.sampled_from(sorted(set(UNIT_NS.values()))),
    st.integers(-(10**18), 10**18),
    st.lists(st.integers(-8 * 10**18, 8 * 10**18), min_size=1, max_size=20),
    st.sampled_from(["i8", ">i8", "i4", "u8"]),
)
@settings(deadline=None)
def test_integers_are_exact(unit_ns, epoch_ns, stamps_ns, dtype):
    units = TimeUnits("stamped", unit_ns, epoch_ns)
    bounds = np.iinfo(dtype)
    raw = [min(max(ns // unit_ns, bounds.min), bounds.max) for ns in stamps_ns]
    raw = [n for n in raw if abs(exact_ns(n, units)) < 2**63] or [0]
    before = np.array(raw, dtype)
    got = units.to_ns(before)
    assert got.tolist() == [exact_ns(n, units) for n in raw]
    assert before.tolist() == raw  # the source's own array is not written to


@given(
    st.sampled_from(sorted(set(UNIT_NS.values()))),
    st.integers(-(10**18), 10**18),
    st.lists(st.floats(-9e18, 9e18), min_size=1, max_size=20),
    st.sampled_from([1, 2**10, 2**20, 1000]),
)
@settings(deadline=None)
def test_floats_are_rounded_once_half_to_even(unit_ns, epoch_ns, stamps_ns, steps):
    units = TimeUnits("stamped", unit_ns, epoch_ns)
    # Many on a grid of fractions, so that ties occur.
    raw = [ns / unit_ns for ns in stamps_ns]
    raw += [round(value * steps) / steps for value in raw]
    raw += [n / 1024 for n in range(-7, 8)] + [-1e-9, 5e-324]
    raw = [value for value in raw if abs(exact_ns(value, units)) < 2**63 and abs(value) < 2**63]
    assert units.to_ns(np.array(raw)).tolist() == [exact_ns(value, units) for value in raw]


def test_ties_go_to_the_even_stamp():
    seconds = TimeUnits("stamped", 10**9, 0)
    # 1/1024 s is 976562.5 ns.
    assert seconds.to_ns(np.array([1, 3, 5]) / 1024).tolist() == [976562, 2929688, 4882812]
    odd = TimeUnits("stamped", 10**9, 1)
    assert odd.to_ns(np.array([1.0]) / 1024).tolist() == [976564]


@pytest.mark.parametrize(
    "dtype", ["M8[ns]", "M8[us]", "M8[ms]", "M8[s]", "M8[h]", "M8[D]", "M8[10ms]"]
)
def test_datetimes(dtype):
    stamps = np.array(["2026-03-01", "1969-12-30", "2000-02-29"], "M8[D]").astype(dtype)
    units = TimeUnits.of_datetimes(stamps.dtype)
    assert units.kind == "stamped"
    assert units.to_ns(stamps).tolist() == stamps.astype("M8[ns]").astype("i8").tolist()
    with pytest.raises(TimeUnitError, match="missing stamp") as refused:
        units.to_ns(np.array(["2000-01-01", "NaT"], dtype))
    assert refused.value.at == 1


def test_durations_and_calendar_units_of_numpy():
    assert TimeUnits.of_datetimes(np.dtype("m8[ms]")).kind == "elapsed"
    for dtype in ("M8[M]", "M8[Y]", "M8[ps]"):
        with pytest.raises(TimeUnitError, match="from ns to weeks"):
            TimeUnits.of_datetimes(np.dtype(dtype))


@pytest.mark.parametrize(
    ("raw", "at"),
    [(np.array([0.0, np.nan]), 1), (np.array([np.inf]), 0), (np.array([3, -99, 5]), 1)],
)
def test_missing_stamps_are_refused_with_their_place(raw, at):
    with pytest.raises(TimeUnitError, match="missing stamp") as refused:
        TimeUnits("stamped", 10**9, 0).with_markers((-99,)).to_ns(raw)
    assert refused.value.at == at


@pytest.mark.parametrize("stamp", [3 * 10**10, -3 * 10**10, 1e30, -(2**62)])
def test_far_stamps_are_refused(stamp):
    with pytest.raises(TimeUnitError, match="1678 to 2262"):
        TimeUnits("stamped", 10**9, 0).to_ns(np.array([0, stamp]))


def test_resolution():
    # A step that integers count exactly adds nothing; one that they do not, a unit.
    milliseconds = TimeUnits("stamped", 10**6, 0)
    whole = np.array([0, 10**12])
    assert milliseconds.resolution_ns(whole, Fraction(10**9, 500)) == 0
    assert milliseconds.resolution_ns(whole, Fraction(10**9, 3)) == 10**6
    # Doubles of 1.7e9 s are 2^-22 s apart.
    seconds = TimeUnits("stamped", 10**9, 0)
    ends = np.array([0.0, 1.7e9])
    assert float(seconds.resolution_ns(ends, Fraction(1))) == pytest.approx(10**9 / 2**22 + 1)
    assert seconds.resolution_ns(ends.astype("f4"), Fraction(1)) > 10**9


def test_stamps_for_people():
    assert stamp_text(1_772_323_200_500_000_000, "stamped") == "2026-03-01T00:00:00.5"
    assert stamp_text(1_772_323_200_000_000_000, "stamped") == "2026-03-01T00:00:00"
    assert stamp_text(-1_500_000_000, "elapsed") == "-1.5 s"
    assert stamp_text(10**10, "elapsed") == "10 s"
