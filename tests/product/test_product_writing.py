"""Whole units: their alignment, their files, and what reads back."""

from __future__ import annotations

import pickle
import tracemalloc
from fractions import Fraction

import numpy as np
import pytest
import zarr
from hypothesis import given, settings
from hypothesis import strategies as st
from made_products import fill, plan, prepare

from pipeline_filters.product.creation import time_fill
from pipeline_filters.product.writer import seconds

RNG = np.random.default_rng(7)


def noise(shape=(250, 3), dtype="float32"):
    return RNG.standard_normal(shape).astype(dtype)


def stored(path, name="gravel_band/gravel_band"):
    return np.asarray(zarr.open_array(str(path / name), mode="r")[...])


LAYOUTS = {
    "time first": {},
    "time last": {
        "dims": ("geophone", "time"),
        "shape": (3, 250),
        "chunks": (2, 60),
        "time_dim": 1,
    },
    "no channels": {"dims": ("time",), "shape": (250,), "chunks": (60,), "coords": {}},
    "time between": {
        "dims": ("row", "time", "geophone"),
        "shape": (2, 250, 3),
        "chunks": (1, 60, 2),
        "time_dim": 1,
    },
    "sharded": {"chunks": (20, 1), "shards": (60, 2)},
    "one chunk": {"chunks": (250, 3)},
    "single samples": {"chunks": (1, 3)},
    "double": {"dtype": "float64"},
}


@pytest.mark.parametrize("layout", LAYOUTS.values(), ids=LAYOUTS.keys())
def test_what_is_written_reads_back(tmp_path, layout):
    made = plan(**layout)
    values = noise(made.shape, made.dtype)
    values[values > 1.5] = np.nan
    fill(prepare(tmp_path / "p", made), "gravel_band", values)
    np.testing.assert_array_equal(stored(tmp_path / "p"), values)
    stamps = stored(tmp_path / "p", "gravel_band/time")
    np.testing.assert_array_equal(stamps, np.arange(250) * 1_000_000)


@pytest.mark.parametrize("layout", ["time first", "time last", "double"])
def test_files_are_those_that_zarr_makes(tmp_path, layout):
    made = plan(**LAYOUTS[layout])
    values = noise(made.shape, made.dtype)
    product = prepare(tmp_path / "ours", made)
    assert product.writer("gravel_band").form is not None
    fill(product, "gravel_band", values)
    prepare(tmp_path / "zarr", made)
    path = "gravel_band/gravel_band"
    with zarr.config.set({"array.write_empty_chunks": True}):
        zarr.open_array(str(tmp_path / "zarr" / path), mode="r+")[...] = values
    for one in sorted((tmp_path / "zarr" / path / "c").rglob("*")):
        if one.is_file():
            two = tmp_path / "ours" / one.relative_to(tmp_path / "zarr")
            assert two.read_bytes() == one.read_bytes()


def test_all_missing_units_differ_from_absent_ones(tmp_path):
    for name, layout in (("plain", {}), ("sharded", LAYOUTS["sharded"])):
        writer = prepare(tmp_path / name, plan(**layout)).writer("gravel_band")
        writer.write(0, 60, (slice(0, 2),), np.full((60, 2), np.nan, np.float32))
        folder = tmp_path / name / "gravel_band/gravel_band/c"
        assert [str(file.relative_to(folder)) for file in folder.rglob("*") if file.is_file()] == [
            "0/0"
        ]
        assert np.isnan(stored(tmp_path / name)).all()


def test_a_ragged_last_unit_is_filled_up_with_missing(tmp_path):
    writer = prepare(tmp_path / "p").writer("gravel_band")
    writer.write(240, 250, (slice(2, 3),), np.ones((10, 1), np.float32))
    array = zarr.open_array(str(tmp_path / "p/gravel_band/gravel_band"), mode="r+")
    array.resize((300, 4))  # what was past the ends comes to light
    assert (array[240:250, 2] == 1).all()
    assert np.isnan(array[250:300, :]).all()
    assert np.isnan(array[240:250, 3]).all()


def test_stamps_that_are_not_written_are_missing_ones(tmp_path):
    product = prepare(tmp_path / "p", plan(), plan("still_band", axis_kind="elapsed"))
    for name in product.results:
        product.writer(name).write_stamps(60, 120, np.arange(60) + 5)
    stamps = stored(tmp_path / "p", "gravel_band/time")
    assert (stamps[:60] == time_fill("stamped")).all()
    assert (stamps[:60].view("M8[ns]") == np.datetime64("NaT")).sum() == 0
    assert np.isnat(stamps[:60].view("M8[ns]")).all()
    np.testing.assert_array_equal(stamps[60:120], np.arange(60) + 5)
    assert np.isnan(stored(tmp_path / "p", "still_band/time")[120:]).all()


def test_a_counted_axis_has_no_coordinate(tmp_path):
    writer = prepare(tmp_path / "p", plan(axis_kind="counted")).writer("gravel_band")
    assert not (tmp_path / "p/gravel_band/time").exists()
    with pytest.raises(ValueError, match="no time coordinate"):
        writer.write_stamps(0, 60, np.arange(60))


def test_elapsed_seconds_are_the_nearest_numbers():
    # Exact fractions are the reference: small counts, where the two parts would be rounded twice,
    # and large ones, which have more digits than a float64 of nanoseconds holds.
    few = [0, 1, -1, 1_500_000_000, 2**53 + 1, 10**18 + 1]
    rng = np.random.default_rng(5)
    stamps = np.concatenate(
        [few, rng.integers(10**9, 3 * 10**9, 2_000), rng.integers(2**53, 2**62, 2_000)]
    )
    nearest = [float(Fraction(int(stamp), 10**9)) for stamp in stamps]
    np.testing.assert_array_equal(seconds(stamps), nearest)


@pytest.mark.parametrize(
    ("start", "stop", "box"),
    [
        (1, 60, slice(0, 2)),
        (0, 59, slice(0, 2)),
        (60, 60, slice(0, 2)),
        (240, 300, slice(0, 2)),
        (240, 251, slice(0, 2)),
        (-60, 0, slice(0, 2)),
        (0, 60, slice(0, 1)),
        (0, 60, slice(1, 3)),
        (0, 60, slice(2, 4)),
        (0, 60, slice(0, 2, 2)),
        (0, 60, slice(None, 2)),
    ],
)
def test_what_is_not_whole_units_is_refused(tmp_path, start, stop, box):
    writer = prepare(tmp_path / "p").writer("gravel_band")
    values = np.zeros((max(0, stop - start), 2), np.float32)
    with pytest.raises(ValueError, match="not made of whole units"):
        writer.write(start, stop, (box,), values)
    assert not (tmp_path / "p/gravel_band/gravel_band/c").exists()


@pytest.mark.parametrize(
    "values", [np.zeros((60, 2)), np.zeros((60, 1), "f4"), np.zeros((2, 60), "f4")]
)
def test_values_of_another_form_are_refused(tmp_path, values):
    writer = prepare(tmp_path / "p").writer("gravel_band")
    with pytest.raises(ValueError, match="for a region of float32"):
        writer.write(0, 60, (slice(0, 2),), values)
    with pytest.raises(ValueError, match="for 60 results"):
        writer.write_stamps(0, 60, np.zeros(60))


@settings(deadline=None, max_examples=25)
@given(data=st.data())
def test_any_run_of_units_from_any_memory_order(tmp_path_factory, data):
    shape = tuple(data.draw(st.integers(1, 9)) for _ in range(3))
    chunks = tuple(data.draw(st.integers(1, 4)) for _ in range(3))
    dim = data.draw(st.integers(0, 2))
    order = data.draw(st.sampled_from(["C", "F"]))
    dims = ["row", "geophone"]
    dims.insert(dim, "time")
    made = plan(dims=tuple(dims), shape=shape, chunks=chunks, time_dim=dim, coords={})
    path = tmp_path_factory.mktemp("any")
    writer = pickle.loads(pickle.dumps(prepare(path / "p", made).writer("gravel_band")))
    bounds = []
    for length, size in zip(shape, chunks, strict=True):
        units = -(-length // size)
        low = data.draw(st.integers(0, units - 1))
        high = data.draw(st.integers(low + 1, units))
        bounds.append(slice(low * size, min(high * size, length)))
    values = np.asarray(noise([part.stop - part.start for part in bounds]), order=order)
    box = tuple(part for index, part in enumerate(bounds) if index != dim)
    writer.write(bounds[dim].start, bounds[dim].stop, box, values)
    expected = np.full(shape, np.nan, np.float32)
    expected[tuple(bounds)] = values
    np.testing.assert_array_equal(stored(path / "p"), expected)


def test_a_product_made_anew_at_the_same_path_is_opened_anew(tmp_path):
    for chunks in ((20, 1), (20, 2)):
        made = plan(chunks=chunks, shards=(60, 2))
        writer = prepare(tmp_path / "p", made).writer("gravel_band")
        writer.write(0, 60, (slice(0, 2),), np.ones((60, 2), np.float32))
        assert (stored(tmp_path / "p")[:60, :2] == 1).all()
        (tmp_path / "p").rename(tmp_path / f"old{chunks[1]}")


def test_a_whole_unit_is_written_without_a_copy(tmp_path):
    made = plan(shape=(60_000, 32), chunks=(30_000, 32), coords={})
    writer = prepare(tmp_path / "p", made).writer("gravel_band")
    values = noise((60_000, 32))
    writer.write(0, 30_000, (slice(0, 32),), values[:30_000])
    tracemalloc.start()
    writer.write(0, 60_000, (slice(0, 32),), values)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    # What is compressed takes room; white noise hardly shrinks.
    assert peak < 1.02 * 30_000 * 32 * 4
