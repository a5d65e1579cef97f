"""The source: stamps, stretches, decoding, and what is refused."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
import zarr

from pipeline_filters.errors import SourceError
from pipeline_filters.source.axis import clock_number
from pipeline_filters.source.cf_time import TimeUnitError, TimeUnits
from pipeline_filters.source.zarr_source import open_zarr_source
from pipeline_filters.spec.model import Missing, Signal

PLATE = Signal("plate", "velocity", "time", Fraction(1000), "1 kHz")
BOX = (slice(0, 2),)
START_NS = 1_772_323_200_000_000_000  # 2026-03-01


def stored(path, values, stamps_ms, **attrs):
    group = zarr.open_group(str(path), mode="w")
    names = ["time", "geophone"]
    array = group.create_array(
        "velocity", shape=values.shape, dtype=values.dtype, chunks=(50, 2), dimension_names=names
    )
    array[...] = values
    array.attrs.update(attrs)
    time = group.create_array(
        "time", shape=(len(stamps_ms),), dtype="i8", chunks=(50,), dimension_names=["time"]
    )
    time[...] = stamps_ms
    time.attrs.update(units="milliseconds since 2026-03-01 00:00:00")
    return str(path)


def test_epochs_and_units():
    # The Unix epoch is Julian day 2440587.5; common practice.
    assert TimeUnits.parse("days since 1970-01-01") == TimeUnits("stamped", 86_400 * 10**9, 0)
    hours = TimeUnits.parse("hours since 1900-01-01T00:00:00Z")
    assert hours.to_ns(np.array([613_608]))[0] == 0  # 25567 days
    east = TimeUnits.parse("s since 1970-01-01 02:00 +02:00")
    assert east.epoch_ns == 0
    assert TimeUnits.parse("ms").kind == "elapsed"
    # 1 January of year 1 of the mixed calendar is two days before the proleptic one.
    mixed = TimeUnits.parse("days since 0001-01-01", "standard").epoch_ns
    proleptic = TimeUnits.parse("days since 0001-01-01", "proleptic_gregorian").epoch_ns
    assert proleptic - mixed == 2 * 86_400 * 10**9


@pytest.mark.parametrize("units", ["months since 2000-01-01", "s since noon", "fortnights"])
def test_units_that_are_refused(units):
    with pytest.raises(TimeUnitError):
        TimeUnits.parse(units)


def test_clock_numbers_round_half_to_even():
    assert clock_number(500_000_000, Fraction(1)) == 0
    assert clock_number(1_500_000_000, Fraction(1)) == 2


def test_a_jump_is_refused_or_splits(tmp_path):
    stamps = np.arange(200) + np.where(np.arange(200) >= 120, 37_000, 0)
    path = stored(tmp_path / "s.zarr", np.zeros((200, 2), "f4"), stamps)
    with pytest.raises(SourceError, match=r"sample 120, 2026-03-01T00:00:37.12: the axis jumps"):
        open_zarr_source(path, {"plate": PLATE}).axis("plate")
    axis = open_zarr_source(path, {"plate": replace(PLATE, breaks="split")}).axis("plate")
    assert axis.starts.tolist() == [0, 120]
    assert axis.lengths.tolist() == [120, 80]
    first = START_NS // 10**6
    assert axis.numbers.tolist() == [first, first + 37_120]


def test_a_rate_that_disagrees_is_refused(tmp_path):
    path = stored(tmp_path / "s.zarr", np.zeros((200, 2), "f4"), np.arange(200) * 2)
    split = replace(PLATE, breaks="split")
    with pytest.raises(SourceError, match="500 Hz"):
        open_zarr_source(path, {"plate": split}).axis("plate")


def test_backward_stamps_are_refused_even_when_splitting(tmp_path):
    stamps = np.arange(200)
    stamps[100:] -= 50
    path = stored(tmp_path / "s.zarr", np.zeros((200, 2), "f4"), stamps)
    with pytest.raises(SourceError, match="goes back"):
        open_zarr_source(path, {"plate": replace(PLATE, breaks="split")}).axis("plate")


def test_packed_samples_and_markers(tmp_path):
    raw = np.arange(400, dtype="i2").reshape(200, 2)
    path = stored(
        tmp_path / "s.zarr", raw, np.arange(200), scale_factor=0.5, add_offset=1, _FillValue=3
    )
    reader = open_zarr_source(path, {"plate": PLATE}).readers["plate"]
    rows = reader.rows(reader.read(0, 4, BOX))
    values = reader.decode(rows, np.dtype(np.float64))
    np.testing.assert_array_equal(values, [[1, 2, 3, 4], [1.5, np.nan, 3.5, 4.5]])
    with pytest.raises(SourceError, match=r"geophone 1, 2026-03-01T00:00:00.001: a missing"):
        reader.screen(values, 0, BOX)
    spread = replace(PLATE, missing=Missing("spread"))
    open_zarr_source(path, {"plate": spread}).readers["plate"].screen(values, 0, BOX)


def test_a_corrupt_chunk_is_named_and_an_absent_one_is_fill(tmp_path):
    path = stored(tmp_path / "s.zarr", np.ones((200, 2), "f4"), np.arange(200))
    reader = open_zarr_source(path, {"plate": PLATE}).readers["plate"]
    (tmp_path / "s.zarr/velocity/c/1/0").write_bytes(b"not a chunk")
    with pytest.raises(SourceError, match="c/1/0"):
        reader.read(0, 200, BOX)
    (tmp_path / "s.zarr/velocity/c/1/0").unlink()
    assert reader.read(50, 100, BOX).sum() == 0


def test_all_problems_come_at_once(tmp_path):
    path = stored(tmp_path / "s.zarr", np.ones((200, 2), "f4"), np.arange(200), units="m/s")
    signals = {
        "one": replace(PLATE, variable="velocty"),
        "two": replace(PLATE, unit="mm/s"),
    }
    with pytest.raises(SourceError) as refused:
        open_zarr_source(path, signals)
    text = str(refused.value)
    assert "did you mean velocity?" in text
    assert "'mm/s'" in text


def test_complex_samples_are_refused(tmp_path):
    path = stored(tmp_path / "s.zarr", np.ones((200, 2), "c8"), np.arange(200))
    with pytest.raises(SourceError, match="real and the imaginary"):
        open_zarr_source(path, {"plate": PLATE})
