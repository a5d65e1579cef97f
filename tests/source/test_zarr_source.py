"""Reading from Zarr stores: formats, shapes, chunks, stamps, and what is broken there."""

from __future__ import annotations

import os
import pickle
import shutil
from dataclasses import replace
from fractions import Fraction
from pathlib import Path

import numcodecs
import numpy as np
import pytest
import zarr
from made_sources import PLATE, START_NS, geophones, kept, make_store, spread
from zarr.codecs import BloscCodec, Crc32cCodec, GzipCodec

from pipeline_filters.errors import SourceError
from pipeline_filters.source.zarr_source import open_zarr_source

F8 = np.dtype(np.float64)


def opened(path, **changes):
    return open_zarr_source(path, {"plate": replace(PLATE, **changes)})


def reader_of(path, **changes):
    return opened(path, **changes).readers["plate"]


def whole(reader):
    return tuple(slice(0, n) for at, n in enumerate(reader.shape) if at != reader.time_dim)


LAYOUTS = [
    ("time",),
    ("time", "geophone"),
    ("geophone", "time"),
    ("time", "geophone", "axis"),
    ("geophone", "time", "axis"),
    ("axis", "geophone", "time"),
]


@pytest.mark.parametrize(("zarr_format", "sharded"), [(2, False), (3, False), (3, True)])
@pytest.mark.parametrize("dims", LAYOUTS, ids="-".join)
def test_every_layout_reads_what_was_stored(tmp_path, dims, zarr_format, sharded):
    sizes = {"time": 23, "geophone": 7, "axis": 3}
    chunks = {"time": 5, "geophone": 2, "axis": 2}
    values = np.random.default_rng(1).standard_normal([sizes[dim] for dim in dims])
    path = make_store(
        tmp_path / "s.zarr",
        values,
        np.arange(23),
        dims=dims,
        chunks=tuple(chunks[dim] for dim in dims),
        shards=tuple(2 * chunks[dim] for dim in dims) if sharded else None,
        zarr_format=zarr_format,
    )
    # All; out of order in all chunks; every third; of the first and last chunk only; one.
    for keep in (None, (5, 0, 3, 6), (0, 3, 6), (6, 0), (2,)):
        if keep and "geophone" not in dims:
            continue
        channels = None if keep is None else kept(*(geophones(7)[at] for at in keep))
        reader = reader_of(path, channels=channels)
        wanted = values
        if keep:
            wanted = np.take(values, keep, axis=dims.index("geophone"))
        assert (reader.dims, reader.shape) == (dims, wanted.shape)
        assert reader.chunk_samples == 5
        assert (reader.shards is not None) == sharded
        for start, stop, first in ((0, 23, 0), (4, 11, 0), (22, 23, 0), (3, 17, 1)):
            box = [slice(min(first, part.stop - 1), part.stop) for part in whole(reader)]
            index = list(box)
            index.insert(reader.time_dim, slice(start, stop))
            got = reader.read(start, stop, tuple(box))
            np.testing.assert_array_equal(got, wanted[tuple(index)])
        rows = reader.rows(reader.read(0, 23, whole(reader)))
        moved = np.moveaxis(wanted, dims.index("time"), -1).reshape(-1, 23)
        np.testing.assert_array_equal(rows, moved)


def test_a_step_wider_than_a_chunk(tmp_path):
    values = np.arange(40.0).reshape(4, 10)
    path = make_store(tmp_path / "s.zarr", values, np.arange(4), chunks=(2, 2))
    reader = reader_of(path, channels=kept("g01", "g06"))
    np.testing.assert_array_equal(reader.read(0, 4, (slice(0, 2),)), values[:, [0, 5]])


@pytest.mark.parametrize("zarr_format", [2, 3])
def test_a_group_inside_a_store(tmp_path, zarr_format):
    zarr.open_group(str(tmp_path / "s.zarr"), mode="w", zarr_format=zarr_format)
    values = np.arange(8.0).reshape(4, 2)
    path = make_store(tmp_path / "s.zarr/day/one", values, np.arange(4), zarr_format=zarr_format)
    np.testing.assert_array_equal(reader_of(path).read(0, 4, (slice(0, 2),)), values)


@pytest.mark.parametrize("dtype", ["i2", "i4", "f4", "f8", "u1"])
@pytest.mark.parametrize("order", ["<", ">"])
def test_samples_come_undecoded(tmp_path, dtype, order):
    values = np.arange(8).reshape(4, 2).astype(order + dtype)
    path = make_store(tmp_path / "s.zarr", values, np.arange(4), scale_factor=0.5)
    reader = reader_of(path)
    raw = reader.read(0, 4, (slice(0, 2),))
    assert raw.dtype.newbyteorder("=") == np.dtype(dtype)
    np.testing.assert_array_equal(raw, values)
    np.testing.assert_array_equal(reader.decode(raw, F8), values * 0.5)
    assert reader.identity()["dtype"] == np.dtype(dtype).name


# Time


@pytest.mark.parametrize(
    ("stamps", "units", "first_ns"),
    [
        (np.arange(5), "seconds since 2026-03-01", START_NS),
        (np.arange(100, 105, dtype="i4"), "s since 1970-01-01T00:00:00Z", 100 * 10**9),
        (np.arange(5, dtype="f8"), "seconds since 2026-03-01 01:00 +01:00", START_NS),
        (np.arange(5, dtype="f4"), "seconds since 1970-01-01", 0),
        # 2026-03-01 is 20,513 days after the Unix epoch: START_NS / 86,400e9.
        (20_513 + np.arange(5) / 86_400, "days since 1970-01-01", START_NS),
        (np.arange(5) * 10**9, "nanoseconds since 2026-03-01", START_NS),
        (np.arange(5, dtype=">i8"), "seconds since 2026-03-01", START_NS),
    ],
    ids=str,
)
def test_datetimes(tmp_path, stamps, units, first_ns):
    path = make_store(tmp_path / "s.zarr", np.zeros((5, 2), "f4"), stamps, units=units)
    source = opened(path, rate_hz=Fraction(1))
    axis = source.axis("plate")
    assert (axis.kind, axis.starts.tolist(), axis.length) == ("stamped", [0], 5)
    got = source.readers["plate"].stamps_ns(0, 5)
    # float64 days since 1970 are about 314 ns fine.
    np.testing.assert_allclose(got - first_ns, np.arange(5) * 10**9, rtol=0, atol=320)


def test_elapsed_numbers_and_no_stamps(tmp_path):
    values = np.zeros((5, 2), "f4")
    elapsed = opened(make_store(tmp_path / "e.zarr", values, np.arange(5) + 3, units="ms"))
    assert elapsed.axis("plate").kind == elapsed.readers["plate"].kind == "elapsed"
    assert elapsed.axis("plate").first_ns.tolist() == [3_000_000]
    assert elapsed.readers["plate"].place(1, 1, (slice(0, 2),)) == "velocity, geophone g02, 0.004 s"
    counted = opened(make_store(tmp_path / "c.zarr", values))
    assert counted.axis("plate").kind == counted.readers["plate"].kind == "counted"
    assert counted.readers["plate"].stamps_ns(0, 5) is None
    assert counted.readers["plate"].identity()["stamps_ns"] is None
    assert (
        counted.readers["plate"].place(1, 0, (slice(1, 2),)) == "velocity, geophone g02, sample 1"
    )


def test_one_sample(tmp_path):
    source = opened(make_store(tmp_path / "s.zarr", np.ones((1, 2), "f4"), np.arange(1)))
    assert source.axis("plate").lengths.tolist() == [1]
    assert source.readers["plate"].read(0, 1, (slice(0, 2),)).tolist() == [[1, 1]]


def test_stamps_are_read_in_any_runs(tmp_path):
    stamps = np.arange(300)
    path = make_store(tmp_path / "s.zarr", np.zeros((300, 1), "f4"), stamps)
    reader = reader_of(path)
    for start, stop in ((0, 300), (5, 7), (60, 70), (299, 300), (64, 128), (0, 1)):
        got = reader.stamps_ns(start, stop)
        np.testing.assert_array_equal(got, START_NS + stamps[start:stop] * 10**6)


def test_a_missing_stamp_is_refused_wherever_it_is_met(tmp_path):
    stamps = np.where(np.arange(9) == 8, -1, np.arange(9))
    path = make_store(
        tmp_path / "s.zarr", np.ones((9, 1), "f4"), stamps, time_attrs={"missing_value": -1}
    )
    source = opened(path)
    reader = source.readers["plate"]
    for look in (reader.identity, lambda: reader.stamps_ns(6, 9), lambda: source.axis("plate")):
        with pytest.raises(SourceError, match="coordinate time, sample 8: a missing stamp"):
            look()


def test_signals_that_share_an_axis_share_its_scan(tmp_path):
    path = make_store(tmp_path / "s.zarr", np.ones((9, 2), "f4"), np.arange(9))
    source = open_zarr_source(path, {"a": PLATE, "b": replace(PLATE, name="b", unit=None)})
    assert source.axis("a") is source.axis("b")


# What is broken


# Blosc and empty shards are what decoders would pass over in silence.
@pytest.mark.parametrize(
    ("zarr_format", "shards", "name", "compressors"),
    [
        (2, None, "1.0", "auto"),
        (2, None, "1.0", None),
        (2, None, "1.0", numcodecs.Zlib()),
        (3, None, "c/1/0", "auto"),
        (3, None, "c/1/0", None),
        (3, None, "c/1/0", BloscCodec()),
        (3, None, "c/1/0", [GzipCodec(), Crc32cCodec()]),
        (3, (50, 2), "c/1/0", "auto"),
        (3, (50, 2), "c/1/0", None),
        (3, (50, 2), "c/1/0", BloscCodec()),
    ],
)
def test_broken_chunks_are_named_and_absent_ones_are_fill(
    tmp_path, zarr_format, shards, name, compressors
):
    values = np.random.default_rng(1).standard_normal((200, 2))
    path = make_store(
        tmp_path / "s.zarr",
        values,
        chunks=(25 if shards else 50, 2),
        shards=shards,
        zarr_format=zarr_format,
        compressors=compressors,
        fill_value=5.0,
        labels=False,
    )
    reader = reader_of(path, missing=spread())
    chunk = Path(path) / "velocity" / name
    content = chunk.read_bytes()
    for broken in (b"", content[:3], content[: len(content) // 2], content[:-1], b"not a chunk"):
        chunk.write_bytes(broken)
        with pytest.raises(SourceError, match=rf"velocity, chunk {name}: cannot be read"):
            reader.read(0, 200, (slice(0, 2),))
        np.testing.assert_array_equal(reader.read(100, 200, (slice(0, 2),)), values[100:])
    chunk.unlink()
    assert (reader.read(50, 100, (slice(0, 2),)) == 5).all()


def test_broken_chunks_of_coordinates_are_named(tmp_path):
    path = make_store(tmp_path / "s.zarr", np.ones((100, 2), "f4"), np.arange(100))
    (Path(path) / "geophone/c/0").write_bytes(b"no")
    with pytest.raises(SourceError, match="geophone, chunk c/0: cannot be read"):
        opened(path)
    path = make_store(tmp_path / "t.zarr", np.ones((100, 2), "f4"), np.arange(100))
    (Path(path) / "time/c/1").write_bytes(b"no")
    with pytest.raises(SourceError, match="time, chunk c/1: cannot be read"):
        opened(path).axis("plate")


def test_a_source_that_changes_is_refused(tmp_path):
    path = make_store(tmp_path / "s.zarr", np.ones((100, 2), "f4"), np.arange(100))
    sent = pickle.dumps(reader_of(path))
    make_store(path, np.ones((90, 2), "f4"), np.arange(90))
    with pytest.raises(SourceError, match=r"was float32 \(100, 2\), is float32 \(90, 2\)"):
        pickle.loads(sent).read(0, 5, (slice(0, 2),))
    shutil.rmtree(path)
    with pytest.raises(SourceError, match="cannot be opened any more"):
        pickle.loads(sent).read(0, 5, (slice(0, 2),))


# Readers as values


def test_a_reader_survives_pickle_and_another_working_directory(tmp_path, monkeypatch):
    values = np.arange(400.0).reshape(200, 2)
    monkeypatch.chdir(tmp_path)
    make_store("s.zarr", values, np.arange(200), chunks=(50, 1))
    sent = pickle.dumps(reader_of("s.zarr", channels=kept("g02")))
    assert len(sent) < 10_000
    os.mkdir("elsewhere")
    monkeypatch.chdir("elsewhere")
    reader = pickle.loads(sent)
    np.testing.assert_array_equal(reader.read(3, 9, (slice(0, 1),)), values[3:9, 1:])
    assert reader.stamps_ns(199, 200).tolist() == [START_NS + 199 * 10**6]


def test_identity_tells_sources_apart_but_not_their_storage(tmp_path):
    values = np.arange(400, dtype="i2").reshape(200, 2)

    def identity(name, values=values, stamps=None, signal=PLATE, **how):
        stamps = np.arange(200) if stamps is None else stamps
        path = make_store(tmp_path / name, values, stamps, **how)
        return open_zarr_source(path, {"plate": signal}).readers["plate"].identity()

    one = identity("a.zarr")
    assert one == identity("b/c.zarr", chunks=(7, 1), compressors=None)
    assert one == identity("d.zarr", chunks=(7, 1), shards=(14, 2))
    assert one == identity("e.zarr", zarr_format=2)
    assert one == identity("f.zarr", values=values.astype(">i2"))
    assert one == identity("g.zarr", stamps=np.arange(200.0))
    others = [
        identity("h.zarr", stamps=np.arange(200) + 1),
        identity("i.zarr", values=values.astype("i4")),
        identity("j.zarr", _FillValue=3),
        identity("k.zarr", labels=np.array([b"g01", b"g03"])),
        identity("l.zarr", signal=replace(PLATE, channels=kept("g02", "g01"))),
        identity("m.zarr", scale_factor=2),
    ]
    assert all(one != other for other in others)
