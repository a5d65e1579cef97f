"""The xarray face beside the Zarr face: the same samples, stamps, coordinates and identity."""

from __future__ import annotations

import pickle
from dataclasses import replace
from fractions import Fraction
from pathlib import Path

import dask.array
import numpy as np
import pytest
import xarray as xr
import zarr
from made_sources import PLATE, geophones, kept, make_store, spread

from pipeline_filters.errors import SourceError
from pipeline_filters.source.dataset_source import open_dataset_source
from pipeline_filters.source.zarr_source import open_zarr_source

LABELS = np.array(geophones(5), np.dtypes.StringDType())


def dataset(path, **how):
    return xr.open_zarr(path, **{"consolidated": False, "mask_and_scale": False, **how})


def both(path, signal=PLATE, **how):
    return (
        open_zarr_source(path, {"plate": signal}),
        open_dataset_source(dataset(path, **how), {"plate": signal}),
    )


def assert_alike(stored, given, ns=0):
    """Readers that give the same; stamps within ``ns``."""
    one, other = stored.readers["plate"], given.readers["plate"]
    assert (one.dims, one.shape, one.time_dim) == (other.dims, other.shape, other.time_dim)
    assert (one.dtype, one.keep, one.labels, one.kind) == (
        (other.dtype, other.keep, other.labels, other.kind)
    )
    assert one.decoding == other.decoding
    boxes = [tuple(slice(0, n) for at, n in enumerate(one.shape) if at != one.time_dim)]
    boxes.append(tuple(slice(part.stop - 1, part.stop) for part in boxes[0]))
    for box in boxes:
        for start, stop in ((0, one.length), (3, 17), (one.length - 1, one.length)):
            raw = one.read(start, stop, box)
            np.testing.assert_array_equal(raw, other.read(start, stop, box))
            stamps = one.stamps_ns(start, stop), other.stamps_ns(start, stop)
            if stamps[0] is None:
                assert stamps[1] is None
            else:
                np.testing.assert_allclose(stamps[1], stamps[0], rtol=0, atol=ns)
    coords = one.channel_coords(), other.channel_coords()
    assert list(coords[0]) == list(coords[1])
    for name, (dims, values, attrs) in coords[0].items():
        assert coords[1][name][0] == dims
        assert coords[1][name][1].tolist() == values.tolist()
        # xarray turns a float's text into the float, and tells the calendar of datetimes.
        stored_attrs = {key: value for key, value in attrs.items() if key != "_FillValue"}
        assert stored_attrs.items() <= coords[1][name][2].items()
    if ns == 0:
        assert one.identity() == other.identity()
        assert vars_of(stored.axis("plate")) == vars_of(given.axis("plate"))


def vars_of(axis):
    return {k: v.tolist() if hasattr(v, "tolist") else v for k, v in vars(axis).items()}


@pytest.mark.parametrize("decode_times", [True, False])
@pytest.mark.parametrize("zarr_format", [2, 3])
@pytest.mark.parametrize("keep", [None, ("g05", "g01", "g04"), ("g02",)])
@pytest.mark.parametrize(
    "dims", [("time", "geophone"), ("geophone", "time"), ("axis", "time", "geophone")]
)
def test_both_faces_give_the_same(tmp_path, dims, keep, zarr_format, decode_times):
    sizes = {"time": 40, "geophone": 5, "axis": 2}
    raw = np.random.default_rng(1).integers(-99, 99, [sizes[dim] for dim in dims]).astype("i2")
    path = stored_with_units(tmp_path, raw, dims, zarr_format)
    channels = None if keep is None else kept(*keep)
    signal = replace(PLATE, channels=channels, unit="mm/s")
    assert_alike(*both(path, signal, decode_times=decode_times))


def stored_with_units(tmp_path, raw, dims, zarr_format):
    path = make_store(
        tmp_path / "s.zarr",
        raw,
        np.arange(40),
        dims=dims,
        chunks=tuple({"time": 7, "geophone": 2, "axis": 1}[dim] for dim in dims),
        labels=LABELS,
        zarr_format=zarr_format,
        scale_factor=0.1,
        add_offset=2,
        missing_value=[5, 6],
        valid_range=[-90, 90],
    )
    zarr.open_array(f"{path}/velocity", mode="a").attrs["units"] = "mm/s"
    return path


@pytest.mark.parametrize("decode_times", [True, False])
@pytest.mark.parametrize(
    ("stamps", "units", "ns"),
    [
        (np.arange(40), "s", 0),
        (np.arange(40, dtype="i4"), "seconds since 1901-01-01 01:00", 0),
        (np.arange(40.0), "seconds since 2026-03-01", 0),
        # xarray multiplies floats before it splits off what is whole: 256 ns near 2026.
        (20_513 + np.arange(40) / 86_400, "days since 1970-01-01", 256),
        (None, None, 0),
    ],
    ids=str,
)
def test_stamps_of_every_kind(tmp_path, stamps, units, ns, decode_times):
    values = np.arange(80.0).reshape(40, 2)
    path = make_store(tmp_path / "s.zarr", values, stamps, units=units, labels=LABELS[:2])
    signal = replace(PLATE, rate_hz=Fraction(1))
    how = {"decode_times": decode_times}
    if units == "s" and decode_times:
        how["decode_timedelta"] = True
    stored, given = both(path, signal, **how)
    assert_alike(stored, given, ns if decode_times else 0)
    assert given.axis("plate").lengths.tolist() == [40]


def test_stamps_that_xarray_has_decoded_stay_as_coarse_as_they_were(tmp_path):
    """10 ms of jitter come from float32 stamps, which xarray shows to the nanosecond."""
    stamps = (100_000 + np.arange(2000) / 10).astype("f4")
    path = make_store(
        tmp_path / "s.zarr",
        np.zeros((2000, 1)),
        stamps,
        units="seconds since 1970-01-01",
        labels=False,
    )
    signal = replace(PLATE, rate_hz=Fraction(10))
    for decode_times in (True, False):
        stored, given = both(path, signal, decode_times=decode_times)
        step_ns = Fraction(10**8)
        coarse = [s.readers["plate"].stamps.resolution_ns(step_ns) for s in (stored, given)]
        assert coarse[0] == pytest.approx(float(coarse[1]), rel=1e-6)
        assert float(coarse[0]) > 7e6
        assert given.axis("plate").starts.tolist() == stored.axis("plate").starts.tolist() == [0]


@pytest.mark.parametrize("zarr_format", [2, 3])
@pytest.mark.parametrize("fill", [0, 7])
def test_fill_values_mean_the_same(tmp_path, zarr_format, fill):
    """xarray shows the fill value of format 2, and only of 2, as _FillValue."""
    raw = np.arange(80, dtype="i2").reshape(40, 2)
    path = make_store(
        tmp_path / "s.zarr",
        raw,
        np.arange(40),
        labels=LABELS[:2],
        zarr_format=zarr_format,
        fill_value=fill,
    )
    stored, given = both(path)
    assert_alike(stored, given)
    markers = (7,) if zarr_format == 2 and fill else ()
    assert given.readers["plate"].decoding.markers == markers


def test_a_stated_marker_of_0_is_kept(tmp_path):
    raw = np.arange(80, dtype="i2").reshape(40, 2)
    path = make_store(tmp_path / "s.zarr", raw, np.arange(40), labels=LABELS[:2], _FillValue=0)
    stored, given = both(path)
    assert_alike(stored, given)
    assert given.readers["plate"].decoding.markers == (0,)


def test_what_xarray_wrote(tmp_path):
    values = np.arange(80, dtype="f4").reshape(40, 2)
    values[3, 1] = np.nan
    time = np.datetime64("2026-03-01", "ns") + np.arange(40) * np.timedelta64(1, "ms")
    made = xr.Dataset(
        {"velocity": (("time", "geophone"), values, {"units": "mm/s"})},
        {
            "time": time,
            "geophone": LABELS[:2],
            "depth": ("geophone", [1.5, 2.5]),
            "placed": ("geophone", time[:2].astype("M8[s]").astype("M8[ns]")),
        },
    )
    signal = replace(PLATE, missing=spread())
    for zarr_format in (2, 3):
        for encoding in ({}, {"velocity": {"dtype": "i2", "_FillValue": -9, "scale_factor": 0.5}}):
            path = tmp_path / f"{zarr_format}{len(encoding)}.zarr"
            made.to_zarr(path, zarr_format=zarr_format, encoding=encoding, consolidated=False)
            stored, given = both(str(path), signal)
            assert_alike(stored, given)
            assert sorted(stored.readers["plate"].channel_coords()) == (
                ["depth", "geophone", "placed"]
            )
            reader = stored.readers["plate"]
            decoded = reader.decode(reader.read(0, 40, (slice(0, 2),)), np.dtype("f8"))
            np.testing.assert_array_equal(decoded, values)


def test_dask_arrays_stay_lazy_and_numpy_arrays_are_taken():
    def never(block):
        raise AssertionError("computed")

    lazy = dask.array.zeros((100, 6), chunks=(30, 4)).map_blocks(
        never, dtype=float, meta=np.zeros((0, 0))
    )
    labels = geophones(6)
    made = xr.Dataset({"velocity": (("time", "geophone"), lazy)}, {"geophone": labels})
    signal = replace(PLATE, channels=kept("g06", "g01", "g03"))
    reader = open_dataset_source(made, {"plate": signal}).readers["plate"]
    assert isinstance(reader.array, dask.array.Array)
    assert reader.chunk_samples == 30
    with pytest.raises(SourceError) as refused:
        reader.read(0, 5, (slice(0, 3),))
    assert (
        "dataset, variable velocity, samples 0 to 5: cannot be read (AssertionError: computed"
        in (str(refused.value))
    )
    values = np.arange(600.0).reshape(100, 6)
    plain = xr.Dataset({"velocity": (("time", "geophone"), values)}, {"geophone": labels})
    reader = open_dataset_source(plain, {"plate": signal}).readers["plate"]
    np.testing.assert_array_equal(reader.array, values[:, [5, 0, 2]])
    assert reader.kind == "counted"
    sent = pickle.loads(pickle.dumps(reader))
    np.testing.assert_array_equal(sent.read(1, 3, (slice(0, 2),)), values[1:3][:, [5, 0]])


def test_broken_chunks_are_refused(tmp_path):
    path = make_store(
        tmp_path / "s.zarr", np.ones((40, 2)), np.arange(40), labels=LABELS[:2], chunks=(10, 2)
    )
    (Path(path) / "velocity/c/1/0").write_bytes(b"not a chunk")
    reader = open_dataset_source(dataset(path), {"plate": PLATE}).readers["plate"]
    with pytest.raises(SourceError, match=r"variable velocity, samples 5 to 15: cannot be read \("):
        reader.read(5, 15, (slice(0, 2),))


PACKED = [
    ("i2", {"scale_factor": 0.5}, "scale_factor"),
    ("i2", {"add_offset": 1}, "add_offset"),
    ("i2", {"missing_value": 4}, "missing_value"),
    ("i2", {"_FillValue": 4, "valid_max": 9}, "_FillValue, valid_max"),
    ("f4", {"scale_factor": 0.5}, "scale_factor"),
]


@pytest.mark.parametrize(("dtype", "attrs", "telling"), PACKED, ids=str)
def test_values_that_xarray_has_decoded_are_refused(tmp_path, dtype, attrs, telling):
    raw = np.arange(8).reshape(4, 2).astype(dtype)
    path = make_store(tmp_path / "s.zarr", raw, np.arange(4), labels=False, **attrs)
    with pytest.raises(SourceError) as refused:
        open_dataset_source(dataset(path, mask_and_scale=True), {"plate": PLATE})
    text = str(refused.value)
    assert f"dataset, variable velocity: values that xarray has decoded ({telling}); " in text
    assert "open the source with mask_and_scale=False" in text
    both(path)


def test_floats_that_xarray_has_only_masked_are_taken(tmp_path):
    raw = np.array([[1, 2], [3, -9]], "f4")
    path = make_store(tmp_path / "s.zarr", raw, labels=False, missing_value=-9.0)
    signal = replace(PLATE, missing=spread())
    given = open_dataset_source(dataset(path, mask_and_scale=True), {"plate": signal})
    reader = given.readers["plate"]
    got = reader.decode(reader.read(0, 2, (slice(0, 2),)), np.dtype("f8"))
    np.testing.assert_array_equal(got, [[1, 2], [3, np.nan]])


def test_refusals_are_those_of_a_store():
    time = np.datetime64("2026-03-01", "ns") + np.arange(4) * np.timedelta64(1, "ms")
    values = (("time", "geophone"), np.ones((4, 2)), {"units": "m/s"})
    made = xr.Dataset({"velocity": values, "words": ("time", list("abcd"))}, {"time": time})

    def refusal(**changes):
        with pytest.raises(SourceError) as refused:
            open_dataset_source(made, {"plate": replace(PLATE, **changes)}).axis("plate")
        return str(refused.value)

    assert "no such variable; the source has time, velocity, words; did you mean velocity?" in (
        refusal(variable="velocty")
    )
    assert "did you mean time?" in refusal(time="tme")
    assert "its unit is 'm/s'" in refusal(unit="mm/s")
    assert "samples of type" in refusal(variable="words")
    assert "has no labels to keep by" in refusal(channels=kept("g01"))
    made["velocity"] = made.velocity.astype("c8")
    assert "complex samples" in refusal()
    made = made.assign_coords(time=np.where(np.arange(4) == 2, np.datetime64("NaT"), time))
    made["velocity"] = values
    assert "sample 2: a missing stamp" in refusal()


def test_a_year_of_another_calendar_is_refused():
    cftime = pytest.importorskip("cftime")
    time = [cftime.DatetimeNoLeap(2000, 1, day) for day in (1, 2, 3)]
    made = xr.Dataset({"velocity": ("time", np.ones(3))}, {"time": time})
    with pytest.raises(SourceError, match="stamps of type object"):
        open_dataset_source(made, {"plate": PLATE})
