"""What a source must be for a signal of the spec: refusals, channels, screening."""

from __future__ import annotations

import json
import zipfile
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import zarr
from made_sources import PLATE, kept, make_store, spread

from pipeline_filters.errors import SourceError
from pipeline_filters.source.zarr_source import open_zarr_source

BOX = (slice(0, 2),)


def refusal(path, signals=None, **changes):
    """The problems of a refused source; each says all that the person must know."""
    with pytest.raises(SourceError) as refused:
        open_zarr_source(path, signals or {"plate": replace(PLATE, **changes)})
    for problem in refused.value.problems:
        assert problem.where
        assert problem.found
        assert problem.allowed
        assert problem.remedy
        assert "\n" not in str(problem)
    return str(refused.value)


@pytest.fixture
def path(tmp_path):
    values = np.ones((20, 2), "f4")
    return make_store(tmp_path / "s.zarr", values, np.arange(20), chunks=(5, 2))


# The store


@pytest.mark.parametrize("url", ["s3://bucket/s.zarr", "http://localhost:1/x", "file:///tmp/s"])
def test_a_url_is_refused_without_looking(url):
    assert "not a local path; a Zarr group on a local path; mount or copy" in refusal(url)


def test_what_is_no_store(path, tmp_path):
    assert "no such path" in refusal(tmp_path / "none.zarr")
    assert "no such path" in refusal("")
    assert "no such path" in refusal(tmp_path / ("x" * 300))
    assert ": a file" in refusal(f"{path}/zarr.json")
    assert f"one array; a Zarr group on a local path; name the group that it lies in: {path}" in (
        refusal(f"{path}/velocity")
    )
    (tmp_path / "folder").mkdir()
    assert "not a Zarr group; " in refusal(tmp_path / "folder")
    with zipfile.ZipFile(tmp_path / "s.zip", "w") as archive:
        archive.write(f"{path}/zarr.json", "zarr.json")
    assert ": a file" in refusal(tmp_path / "s.zip")


@pytest.mark.parametrize("content", [b"{bad", b"\xff\xfe\x00", b"[]", b""])
def test_metadata_that_cannot_be_read(path, content):
    (Path(path) / "velocity/zarr.json").write_bytes(content)
    text = refusal(path)
    assert f"{path}/velocity: cannot be opened (" in text
    assert "restore the array's metadata" in text
    # A search for the nearest word passes over it.
    assert "the source has geophone, time; " in refusal(path, variable="other")
    (Path(path) / "zarr.json").write_bytes(content)
    assert "its metadata cannot be read (" in refusal(path)


def test_metadata_of_another_kind(path):
    (Path(path) / "velocity/zarr.json").write_text("{}")
    assert "cannot be opened (" in refusal(path)


# The variable


def test_a_missing_variable(path):
    group = zarr.open_group(path, mode="a")
    group.create_group("sub")
    (Path(path) / "notes.txt").write_text("not of Zarr")
    (Path(path) / "pictures").mkdir()
    text = refusal(path, variable="velocty")
    assert "no such variable; the source has geophone, time, velocity; did you mean velocity?" in (
        text
    )
    for name in ("sub", "pictures", "notes.txt", ".", "..", "", "/tmp", "sub/x", "x" * 300):
        assert "no such variable" in refusal(path, variable=name)


def test_missing_and_unnamed_dimensions(path, tmp_path):
    text = refusal(path, time="tme")
    assert "no dimension tme; its dimensions are time, geophone; did you mean time?" in text
    values = np.ones((20, 2), "f4")
    unnamed = make_store(tmp_path / "u.zarr", values, dims=(None, None), labels=False)
    assert "no dimension time: its dimensions have no names" in refusal(unnamed)
    twice = make_store(tmp_path / "t.zarr", np.ones((3, 3)), dims=("time", "time"), labels=False)
    assert "dimensions time, time; a name of its own for each" in refusal(twice)
    scalar = make_store(tmp_path / "n.zarr", 3.0, dims=(), labels=False)
    assert "a single value" in refusal(scalar)
    one = make_store(tmp_path / "o.zarr", np.ones(5), dims=(None,), labels=False)
    assert open_zarr_source(one, {"plate": PLATE}).readers["plate"].dims == ("time",)


@pytest.mark.parametrize("names", ["time", 5, ["time"], [None, "time"], {"time": 0, "x": 1}])
def test_dimension_names_that_are_none(tmp_path, names):
    path = make_store(tmp_path / "s.zarr", np.ones((20, 2), "f4"), zarr_format=2, labels=False)
    (Path(path) / "velocity/.zattrs").write_text(json.dumps({"_ARRAY_DIMENSIONS": names}))
    assert "its dimensions have no names" in refusal(path)


@pytest.mark.parametrize("shape", [(0, 2), (20, 0)])
def test_no_samples(tmp_path, shape):
    path = make_store(tmp_path / "s.zarr", np.ones(shape), np.arange(shape[0]), labels=False)
    assert f"no samples (time {shape[0]}, geophone {shape[1]})" in refusal(path)


@pytest.mark.parametrize(
    ("dtype", "said"),
    [
        ("c8", "complex samples (complex64)"),
        ("S3", "samples of type |S3"),
        ("U3", "samples of type <U3"),
        (np.dtypes.StringDType(), "samples of type StringDType()"),
        ("?", "samples of type bool"),
        ("M8[s]", "samples of type datetime64[s]"),
    ],
)
def test_samples_that_are_no_real_numbers(tmp_path, dtype, said):
    path = make_store(tmp_path / "s.zarr", np.zeros((4, 2)).astype(dtype), np.arange(4))
    assert f"variable velocity: {said}; " in refusal(path)


def test_units(tmp_path):
    values = np.ones((20, 2), "f4")
    path = make_store(tmp_path / "s.zarr", values, np.arange(20))
    assert "it states no unit; the spec states 'mm/s'" in refusal(path, unit="mm/s")
    zarr.open_array(f"{path}/velocity", mode="a").attrs["units"] = "m/s"
    assert "its unit is 'm/s'; the spec states 'mm/s', to the letter" in refusal(path, unit="mm/s")
    reader = open_zarr_source(path, {"plate": replace(PLATE, unit="m/s")}).readers["plate"]
    assert reader.identity()["unit"] == "m/s"


@pytest.mark.parametrize(
    ("stamps", "attrs", "said"),
    [
        (np.arange(19), {}, "its shape is (19,) along time; one stamp for each of 20 samples"),
        (np.arange(20), {"units": None}, "stamps without a unit"),
        (np.arange(20), {"units": 5}, "units 5"),
        (np.arange(20), {"units": "months since 2000-01-01"}, "time unit 'months'"),
        (np.arange(20), {"units": "s since noon"}, "epoch 'noon'"),
        (np.arange(20), {"calendar": "noleap"}, "calendar 'noleap'"),
        (np.arange(20), {"scale_factor": 2}, "packed stamps (scale_factor)"),
        (np.arange(20), {"_FillValue": "zz"}, "attribute _FillValue: 'zz', which is no number"),
        (np.arange(20).astype("S3"), {}, "stamps of type |S3"),
        (np.arange(20).astype("c8"), {}, "stamps of type complex64"),
    ],
)
def test_stamps_that_cannot_be_read(tmp_path, stamps, attrs, said):
    path = make_store(tmp_path / "s.zarr", np.ones((20, 2), "f4"), stamps, time_attrs=attrs)
    assert f"coordinate time{'' if said.startswith('attr') else ': '}" in refusal(path)
    assert said in refusal(path)


def test_all_problems_come_at_once_and_each_once(tmp_path):
    values = np.ones((20, 2), "f4")
    path = make_store(tmp_path / "s.zarr", values, np.arange(20), units="months")
    attrs = {"units": "m/s", "scale_factor": "fast", "valid_range": [1]}
    zarr.open_array(f"{path}/velocity", mode="a").attrs.update(attrs)
    bad = replace(PLATE, unit="mm/s", channels=kept("g01", "g99"))
    signals = {"a": replace(PLATE, variable="velocty"), "b": bad, "c": bad}
    lines = refusal(path, signals).splitlines()
    wanted = ["velocity?", "scale_factor", "valid_range", "'mm/s'", "'months'", "no geophone g99"]
    assert len(lines) == len(wanted)
    for part in wanted:
        assert sum(part in line for line in lines) == 1
    # A dimension that is missing does not hide what else is wrong.
    text = refusal(path, time="tme", unit="mm/s")
    assert "did you mean time?" in text
    assert "'mm/s'" in text
    assert "scale_factor" in text


# Channels


@pytest.mark.parametrize(
    ("labels", "keep", "positions"),
    [
        (np.array(["a", "b", "c"], np.dtypes.StringDType()), ("c", "a"), (2, 0)),
        (np.array(["a", "b", "c"], "U5"), ("b",), (1,)),
        (np.array([b"a", b"b", b"c"]), ("c", "b", "a"), (2, 1, 0)),
        (np.array(["gr\u00fcn".encode(), b"b", b"c"]), ("gr\u00fcn",), (0,)),
        (np.array([10, 20, 30]), (30, "10"), (2, 0)),
        (np.array([10, 20, 30], ">i2"), (20.0,), (1,)),
        (np.array([0.1, 2, 3], "f4"), (2, 0.1), (1, 0)),
        (np.array([0.1, 2, 3], "f8"), (3.0, 0.1), (2, 0)),
    ],
    ids=str,
)
def test_channels_are_kept_by_label_in_the_specs_order(tmp_path, labels, keep, positions):
    values = np.arange(12.0).reshape(4, 3)
    path = make_store(tmp_path / "s.zarr", values, labels=labels)
    reader = open_zarr_source(path, {"plate": replace(PLATE, channels=kept(*keep))}).readers[
        "plate"
    ]
    assert reader.keep == (positions,)
    box = (slice(0, len(keep)),)
    np.testing.assert_array_equal(reader.read(0, 4, box), values[:, list(positions)])
    dims, coord, _ = reader.channel_coords()["geophone"]
    assert (dims, coord.tolist()) == (("geophone",), labels[list(positions)].tolist())
    assert len(reader.labels[0]) == len(keep)


def test_channels_that_cannot_be_kept(path, tmp_path):
    text = refusal(path, channels=kept("g01", "g03", "g01"))
    assert "no geophone g03; it has g01, g02; " in text
    assert "geophone g01 is kept 2 times; each channel once" in text
    other = replace(kept("g01"), dimension="geofone")
    assert "no channel dimension geofone; it has geophone; did you mean geophone?" in (
        refusal(path, channels=other)
    )
    values = np.ones((4, 3))
    twins = make_store(tmp_path / "t.zarr", values, labels=np.array([b"a", b"b", b"a"]))
    assert "2 times geophone a; labels that tell" in refusal(twins, channels=kept("a"))
    named = make_store(tmp_path / "n.zarr", values, labels=np.array([b"left", b"mid", b"right"]))
    assert "it has left, mid, right; did you mean right?" in refusal(named, channels=kept("rigt"))
    bare = make_store(tmp_path / "b.zarr", values, labels=False)
    assert "dimension geophone has no labels to keep by" in refusal(bare, channels=kept("a"))


def test_labels_of_another_number_are_refused(tmp_path):
    path = make_store(tmp_path / "s.zarr", np.ones((4, 3)), labels=np.array([b"a", b"b"]))
    assert "coordinate geophone: its shape is (2,); (3,), as variable velocity" in refusal(path)


def test_listed_coordinates_come_along_at_the_kept_channels(tmp_path):
    values = np.ones((4, 3))
    path = make_store(tmp_path / "s.zarr", values, np.arange(4), coordinates="depth noise nowhere")
    group = zarr.open_group(path, mode="a")
    for name, data, dims in (
        ("depth", np.array([1.0, 2, 3]), ("geophone",)),
        ("noise", values, ("time", "geophone")),
        ("height", np.array([4.0, 5, 6]), ("geophone",)),
        ("unlisted", np.array([4.0, 5, 6]), ("geophone",)),
    ):
        group.create_array(name, data=data, dimension_names=dims)
    group.attrs["coordinates"] = "height"
    group["depth"].attrs["units"] = "m"
    signal = replace(PLATE, channels=kept("g03", "g01"))
    coords = open_zarr_source(path, {"plate": signal}).readers["plate"].channel_coords()
    assert list(coords) == ["depth", "geophone", "height"]
    dims, depth, attrs = coords["depth"]
    assert (dims, depth.tolist(), attrs) == (("geophone",), [3, 1], {"units": "m"})


@pytest.mark.parametrize("listed", [5, ["depth"], "../x /etc", "x" * 300, None])
def test_lists_of_coordinates_that_name_none(tmp_path, listed):
    path = make_store(tmp_path / "s.zarr", np.ones((4, 3)), coordinates=listed)
    coords = open_zarr_source(path, {"plate": PLATE}).readers["plate"].channel_coords()
    assert list(coords) == ["geophone"]


# Screening


def test_screening_names_channel_and_time(tmp_path):
    values = np.ones((20, 2), "f4")
    values[7, 1] = values[9, 0] = np.nan
    values[8, 1] = -np.inf
    path = make_store(tmp_path / "s.zarr", values, np.arange(20))

    def screen(start=6, box=(slice(1, 2),), **changes):
        signal = replace(PLATE, **changes)
        reader = open_zarr_source(path, {"plate": signal}).readers["plate"]
        rows = reader.rows(reader.read(start, 20, box))
        reader.screen(reader.decode(rows, np.dtype("f4")), start, box)

    with pytest.raises(SourceError) as refused:
        screen()
    missing, infinite = refused.value.problems
    assert missing.where == "velocity, geophone g02, 2026-03-01T00:00:00.007"
    assert missing.found == "a missing sample"
    assert "missing: spread or bridge for signal plate" in missing.remedy
    assert infinite.where == "velocity, geophone g02, 2026-03-01T00:00:00.008"
    assert "infinite: missing for signal plate" in infinite.remedy
    with pytest.raises(SourceError, match=r"geophone g02, \S+\.007: a missing sample \(and 1 more"):
        screen(5, BOX, channels=kept("g02", "g01"))
    with pytest.raises(SourceError, match="an infinite sample"):
        screen(missing=spread())
    with pytest.raises(SourceError, match="a missing sample"):
        screen(infinite="missing")
    screen(missing=spread(), infinite="missing")


def test_large_finite_samples_are_no_reason(tmp_path):
    path = make_store(tmp_path / "s.zarr", np.full((20, 2), 3e38, "f4"), np.arange(20))
    reader = open_zarr_source(path, {"plate": PLATE}).readers["plate"]
    reader.screen(reader.rows(reader.read(0, 20, BOX)), 0, BOX)
