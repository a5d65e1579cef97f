"""Sources that do not fit, are broken, or are merely odd: whole messages, word for word."""

from __future__ import annotations

import numpy as np
import pytest
import zarr
from made_runs import HUM, call, changed, plate, refuses, smooth, spec_file, store, tree

CLOCK = np.arange(1000)


def with_(index, value, stamps=CLOCK):
    stamps = stamps.copy()
    stamps[index] = value
    return stamps


# name: pieces of the spec exchanged, the source, message
SOURCES = {
    "another variable": (
        ("velocity", "velocty"),
        {},
        "~/source.zarr, variable velocty: no such variable; the source has time, velocity; did "
        "you mean velocity?",
    ),
    "another dimension": (
        ("velocity", "velocity, time: zeit"),
        {},
        "~/source.zarr, variable velocity: no dimension zeit; its dimensions are time, geophone; "
        "state time: for signal plate",
    ),
    "no unit where one is stated": (
        ("1 kHz", "1 kHz, unit: mm/s"),
        {},
        "~/source.zarr, variable velocity: it states no unit; the spec states 'mm/s'; set its "
        "units attribute, or state no unit in the spec",
    ),
    "no samples": (
        None,
        {"values": plate(0)},
        "~/source.zarr, variable velocity: no samples (time 0, geophone 2); at least one sample; "
        "fill the source first",
    ),
    "no channels": (
        None,
        {"values": plate(10, 0)},
        "~/source.zarr, variable velocity: no samples (time 10, geophone 0); at least one sample; "
        "fill the source first",
    ),
    "another rate": (
        None,
        {"stamps": 2 * CLOCK},
        "velocity, coordinate time, samples 0 to 999: the usual step is 0.002 s (500 Hz); the "
        "spec states 1 kHz (0.001 s a sample); state the source's rate in the spec, or name the "
        "right source",
    ),
    "a rate a little off": (
        None,
        {"stamps": 1.001 * CLOCK},
        "velocity, coordinate time, 1000 samples from 2026-03-01T00:00:00: the mean rate is "
        "999.000999 Hz, -999.0 ppm off the stated 1 kHz; at most 100 ppm; state the true rate, "
        "or a wider rate_tolerance",
    ),
    "a jump": (
        None,
        {"stamps": np.where(CLOCK < 500, CLOCK, CLOCK + 7)},
        "velocity, coordinate time, sample 500, 2026-03-01T00:00:00.507: the axis jumps: the "
        "step is 0.008 s; steps of 0.001 s within a tenth; state breaks: split, or mend the axis",
    ),
    "a step back": (
        ("1 kHz", "1 kHz, breaks: split"),
        {"stamps": with_(500, 3)},
        "velocity, coordinate time, sample 500, 2026-03-01T00:00:00.003: time goes back: the "
        "step is -0.496 s; steps of 0.001 s within a tenth; sort the source by time, and mend "
        "the stamp\nvelocity, coordinate time: 1 more irregular steps",
    ),
    "a missing stamp": (
        None,
        {"stamps": with_(500, np.nan, CLOCK.astype("f8"))},
        "velocity, coordinate time, sample 500: a missing stamp; one stamp for every sample; "
        "give the sample its stamp, or take the sample out of the source",
    ),
    "stamps without a unit": (
        None,
        {"units": None},
        "~/source.zarr, coordinate time: stamps without a unit; a CF unit, such as 'milliseconds "
        "since 1970-01-01' or 's'; set the units attribute of the time coordinate",
    ),
    "too few stamps": (
        None,
        {"stamps": CLOCK[:10]},
        "~/source.zarr, coordinate time: its shape is (10,) along time; one stamp for each of "
        "1000 samples along time; mend the source, so that every sample has one stamp",
    ),
}


@pytest.mark.parametrize("name", SOURCES)
def test_a_source_that_does_not_fit(name, tmp_path, capsys):
    piece, made, message = SOURCES[name]
    spec = spec_file(tmp_path, changed(*[piece] if piece else []))
    source = store(tmp_path / "source.zarr", **made)
    for command in (["forecast", spec, source], ["filter", spec, source, tmp_path / "product"]):
        assert refuses(capsys, command, 4, tmp_path) == message


def test_a_source_that_is_none(tmp_path, capsys):
    spec, source = spec_file(tmp_path), store(tmp_path / "source.zarr")
    (tmp_path / "broken.zarr").mkdir()
    (tmp_path / "empty").mkdir()
    (tmp_path / "broken.zarr" / "zarr.json").write_text("{")
    for place, message in {
        tmp_path / "nothing": "~/nothing: no such path; a Zarr group on a local path; name the "
        "store, or a group in it",
        spec: "~/weir.yaml: a file; a Zarr group on a local path; name the store, or a group in it",
        tmp_path / "empty": "~/empty: not a Zarr group; a Zarr group on a local path; name the "
        "store, or a group in it",
        tmp_path / "broken.zarr": "~/broken.zarr: its metadata cannot be read "
        "(JSONDecodeError: Expecting property name enclosed in double quotes: line 1 column 2 "
        "(char 1)); a Zarr group on a local path; restore the group's metadata from its origin",
        source / "velocity": "~/source.zarr/velocity: one array; a Zarr group on a local path; "
        "name the group that it lies in: ~/source.zarr",
        "https://weir.example/plate.zarr": "https://weir.example/plate.zarr: not a local path; a "
        "Zarr group on a local path; mount or copy the store, and name its local path",
    }.items():
        command = ["filter", spec, place, tmp_path / "product"]
        assert refuses(capsys, command, 4, tmp_path) == message


# what lies at 300 to 302 of geophone 1: policies that refuse it, and what they say
SAMPLES = {
    "nan": (np.nan, {}),
    "marker": (-999, {"_FillValue": -999.0}),
    "beyond": (1e20, {"valid_max": 1000.0}),
    "infinite": (np.inf, {}),
}
MISSING = (
    "velocity, geophone 1, 2026-03-01T00:00:00.3: a missing sample (and 2 more in the samples "
    "read with it); missing samples only where the spec says what becomes of them; mend the "
    "source, or state missing: spread or bridge for signal plate"
)
INFINITE = (
    "velocity, geophone 1, 2026-03-01T00:00:00.3: an infinite sample (and 2 more in the samples "
    "read with it); finite samples, as the spec says infinite: refuse; mend the source, or state "
    "infinite: missing for signal plate"
)


@pytest.mark.parametrize("kind", SAMPLES)
@pytest.mark.parametrize("missing", ["refuse", "spread", "{bridge: 5 samples}"])
@pytest.mark.parametrize("infinite", ["refuse", "missing"])
def test_samples_under_every_policy(kind, missing, infinite, tmp_path, capsys):
    value, attrs = SAMPLES[kind]
    values = plate()
    values[300:303, 1] = value
    spec = spec_file(
        tmp_path, changed(("1 kHz", f"1 kHz, missing: {missing}, infinite: {infinite}"))
    )
    source = store(tmp_path / "source.zarr", values, **attrs)
    before = tree(source)
    product = tmp_path / "product"
    said = call(capsys, "filter", spec, source, product, "--workers", 1)
    assert tree(source) == before
    wanted = {"refuse": MISSING, "spread": 7, "{bridge: 5 samples}": 0}[missing]
    if kind == "infinite" and infinite == "refuse":
        wanted = INFINITE
    if isinstance(wanted, str):
        assert (said.code, said.out, said.err) == (4, "", wanted + "\n")
        # A mended source goes on from there.
        zarr.open_array(str(source / "velocity"))[300:303, 1] = 0
        assert call(capsys, "filter", spec, source, product, "--workers", 1).code == 0
        wanted = 0
    assert said.code == 0 or wanted == 0
    assert np.isnan(smooth(product)).sum() == wanted


def test_a_missing_chunk_is_fill(tmp_path, capsys):
    values = np.ones((1000, 2), "f4")
    source = store(tmp_path / "source.zarr", values, fill_value=3.0)
    (source / "velocity" / "c" / "1" / "0").unlink()
    product = tmp_path / "product"
    assert call(capsys, "filter", spec_file(tmp_path), source, product).code == 0
    made = smooth(product)
    np.testing.assert_allclose(made[254:500, 0], 3, rtol=1e-6)
    np.testing.assert_allclose(made[254:500, 1], 1, rtol=1e-6)


BROKEN = {
    "truncated": lambda chunk: chunk[:-100],
    "empty": lambda chunk: b"",
    "other bytes": lambda chunk: bytes(len(chunk)),
}


BROKEN_SAYS = dict.fromkeys(BROKEN, "RuntimeError: Zstd decompression error: invalid input data")
BROKEN_SAYS["empty"] = "ValueError: an empty file"


@pytest.mark.parametrize(
    ("name", "workers"), [("truncated", 1), ("truncated", 2), ("empty", 1), ("other bytes", 1)]
)
def test_a_broken_chunk_is_named(name, workers, tmp_path, capsys):
    spec, source, product = spec_file(tmp_path), tmp_path / "source.zarr", tmp_path / "product"
    chunk = store(source) / "velocity" / "c" / "1" / "0"
    whole = chunk.read_bytes()
    chunk.write_bytes(BROKEN[name](whole))
    before = tree(source)
    said = call(capsys, "filter", spec, source, product, "--workers", workers, "--json")
    assert said.code == said.record["exit_code"] == 4
    assert said.err.replace(str(tmp_path), "~") == (
        f"~/source.zarr/velocity, chunk c/1/0: cannot be read ({BROKEN_SAYS[name]}); whole "
        "chunks, or none (an absent chunk is fill); restore the chunk from its origin, or delete "
        "it to have it read as fill\n"
    )
    assert tree(source) == before
    chunk.write_bytes(whole)
    assert call(capsys, "filter", spec, source, product, "--workers", 1).code == 0
    assert call(capsys, "filter", spec, source, tmp_path / "anew", "--workers", 1).code == 0
    np.testing.assert_array_equal(smooth(product), smooth(tmp_path / "anew"))


def test_broken_stamps_and_metadata(tmp_path, capsys):
    spec, source = spec_file(tmp_path), store(tmp_path / "source.zarr")
    command = ["filter", spec, source, tmp_path / "product"]
    stamps = (source / "time" / "c" / "1").read_bytes()
    (source / "time" / "c" / "1").write_bytes(b"junk")
    assert refuses(capsys, command, 4, tmp_path) == (
        "~/source.zarr/time, chunk c/1: cannot be read (RuntimeError: Zstd decompression error: "
        "invalid input data); whole chunks, or none (an absent chunk is fill); restore the chunk "
        "from its origin, or delete it to have it read as fill"
    )
    (source / "time" / "c" / "1").write_bytes(stamps)
    (source / "velocity" / "zarr.json").write_text("{")
    assert refuses(capsys, command, 4, tmp_path) == (
        "~/source.zarr/velocity: cannot be opened (JSONDecodeError: Expecting property name "
        "enclosed in double quotes: line 1 column 2 (char 1)); an array of Zarr format 2 or 3; "
        "restore the array's metadata from its origin"
    )


# name: spec, samples; odd, and taken
ODD = {
    "a filter longer than the source": (changed(("5 samples", "301 samples")), 100),
    "one sample": (changed(), 1),
    "one sample of many filters": (HUM, 1),
    "one sample, blank ends": (changed(("hold", "blank")), 1),
    "a split axis": (changed(("1 kHz", "1 kHz, breaks: split")), 100),
}


@pytest.mark.parametrize("name", ODD)
def test_what_is_odd_is_taken(name, tmp_path, capsys):
    text, length = ODD[name]
    source, product = tmp_path / "source.zarr", tmp_path / "product"
    clock = np.arange(length)
    store(
        source, plate(length), np.where(clock < 50, clock, clock + 7) if "axis" in name else clock
    )
    said = call(capsys, "filter", spec_file(tmp_path, text), source, product, "--workers", 1)
    assert (said.code, said.err) == (0, "")
    made = smooth(product)
    assert made.shape == (length, 2)
    assert np.isnan(made).all() if "blank" in name else np.isfinite(made).all()


def test_a_filter_longer_than_the_source_has_the_right_values(tmp_path, capsys):
    values = plate(100, 1)
    source, product = store(tmp_path / "source.zarr", values), tmp_path / "product"
    spec = spec_file(tmp_path, changed(("5 samples", "301 samples")))
    assert call(capsys, "filter", spec, source, product, "--workers", 1).code == 0
    padded = np.concatenate([np.full(300, values[0, 0]), values[:, 0]]).astype("f8")
    wanted = np.convolve(padded, np.full(301, 1 / 301), "valid")
    np.testing.assert_allclose(smooth(product)[:, 0], wanted, atol=1e-6)


def test_an_even_length_aligned_is_stamped_half_a_sample_later(tmp_path, capsys):
    values = plate(100, 1)
    source, product = store(tmp_path / "source.zarr", values), tmp_path / "product"
    spec = spec_file(tmp_path, changed(("5 samples", "4 samples"), ("causal", "aligned")))
    said = call(capsys, "filter", spec, source, product, "--workers", 1, "--json")
    assert said.code == 0
    result = said.record["results"]["smooth"]
    assert result["stamped_half_a_sample_later"]
    assert result["published_until"] == "2026-03-01T00:00:00.099500000Z"
    stamps = zarr.open_array(str(product / "smooth" / "time"))[...]
    np.testing.assert_array_equal(np.diff(stamps), 1_000_000)
    assert stamps[0] == 1_772_323_200_000_500_000
    # The result stamped between samples 1 and 2 is the mean of the samples 0 to 3.
    np.testing.assert_allclose(smooth(product)[1, 0], values[:4, 0].mean(), rtol=1e-5)


def test_samples_without_stamps_are_counted(tmp_path, capsys):
    source, product = store(tmp_path / "source.zarr", stamps=None), tmp_path / "product"
    said = call(capsys, "filter", spec_file(tmp_path), source, product, "--workers", 1, "--json")
    assert said.code == 0
    assert said.record["results"]["smooth"]["published_until"] == 1000
    assert not (product / "smooth" / "time").exists()
