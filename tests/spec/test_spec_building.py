"""From text to the model: conversions, defaults, references, warnings, files."""

from __future__ import annotations

import hashlib
import json
import subprocess
import sys
from fractions import Fraction
from io import BytesIO
from pathlib import Path

import numpy as np
import pytest
from weir_spec import EXAMPLES, SOUND, read, refused, with_

from pipeline_filters.design.designing import design_filter
from pipeline_filters.errors import SpecError
from pipeline_filters.spec import (
    Amount,
    Band,
    Blocks,
    Channels,
    Missing,
    Place,
    Result,
    Signal,
    read_spec,
)
from pipeline_filters.spec.schema import method_names

NAMES = sorted(path.name for path in EXAMPLES.glob("*.yaml"))


@pytest.mark.parametrize("name", NAMES)
def test_examples_are_sound(name):
    spec = read_spec(EXAMPLES / name)
    assert spec.warnings == ()
    assert spec.file.endswith(name)
    text = (EXAMPLES / name).read_text()
    assert spec.text == text
    assert text.startswith("# yaml-language-server: $schema=../schemas/filter-spec.schema.json\n")


def test_every_method_has_an_example():
    used = {f.method for name in NAMES for f in read_spec(EXAMPLES / name).filters.values()}
    assert used == set(method_names())


@pytest.mark.parametrize("name", NAMES)
def test_examples_can_be_designed(name):
    spec = read_spec(EXAMPLES / name)
    for result in spec.results.values():
        for filter in result.through:
            rate_hz = spec.signals[result.signal].rate_hz
            design_filter(spec.filters[filter], rate_hz, result.timing)


def test_the_whole_language_becomes_the_model():
    spec = read_spec(EXAMPLES / "hum-out-gravel-band.yaml")
    assert spec.signals == {
        "plate": Signal(
            name="plate",
            variable="velocity",
            time="time",
            rate_hz=Fraction(1000),
            rate_text="1 kHz",
            unit="mm/s",
            channels=Channels("geophone", ("g01", "g02", "g05")),
            breaks="split",
            missing=Missing("bridge", Amount("5 samples", samples=Fraction(5))),
            infinite="missing",
        )
    }
    hum, gravel = spec.filters.values()
    assert (hum.method, hum.settings) == ("notch", {"centre": 50, "width": 2})
    assert gravel.settings == {}
    assert gravel.bands == (
        Band(0.0, 15.0, 0.0, -60.0, True),
        Band(25.0, 200.0, 1.0, 0.1, True),
        Band(240.0, None, 0.0, -60.0, True),
    )
    assert spec.results == {
        "gravel_band": Result(
            name="gravel_band",
            signal="plate",
            through=("hum", "gravel"),
            timing="zero-phase",
            ends="hold",
            keep_as="float32",
            chunks={"time": 60000},
        )
    }
    assert spec.blocks == Blocks()


def test_places_lead_back_to_the_text():
    spec = read(SOUND)
    hum = spec.filters["hum"]
    assert hum.place() == "weir.yaml:6:3"
    assert hum.place("centre") == "weir.yaml:6:32"
    assert hum.place("bands") == "weir.yaml:6:3"  # absent: the filter itself
    assert spec.signals["plate"].place == Place("weir.yaml", 4, 3)
    assert spec.results["clean"].place == Place("weir.yaml", 8, 3)


def test_what_is_not_stated_has_its_default():
    spec = read(SOUND)
    plate, hum, clean = spec.signals["plate"], spec.filters["hum"], spec.results["clean"]
    assert plate.time == "time"
    assert (plate.breaks, plate.missing.policy, plate.infinite) == ("refuse", "refuse", "refuse")
    assert plate.rate_tolerance == Fraction(1, 10_000)
    assert (plate.unit, plate.channels) == (None, None)
    assert hum.settle == 1e-3
    assert (clean.keep_as, clean.chunks, clean.bands, clean.title) == (None, None, (), None)


def test_every_option_is_heeded():
    text = """\
spec_version: 1
title: All options
notes: for people
signals:
  level:
    variable: stage
    time: clock
    sample_interval: 10 min
    rate_tolerance: 0.1 %
    channels: {dimension: gauge, keep: [3, up, 1.5]}
    missing: spread
filters:
  low:
    method: butterworth
    order: 4
    shape: band-stop
    corners: [2 / day, 4 / day]
    settle: 1
    bands: [{to: 1 / day, gain: 1, tolerance: 0.5}]
  mean: {method: moving-average, length: 1 h}
  shaped:
    method: window
    window: [general_cosine, [0.5, 0.25]]
    length: 5 samples
    shape: low-pass
    corners: [0.1 mHz]
  given: {method: taps, taps: [1, -2.5, 1e-3]}
results:
  slow:
    from: level
    through: [low, mean, shaped, given, mean]
    timing: causal
    ends: blank
    bands: [{gain: 0, tolerance: -1 dB}]
    title: Slow level
    chunks: {clock: 100, gauge: 1}
blocks: {hop: auto, latency: 1 day, precision: float32}
"""
    spec = read(text)
    level, slow = spec.signals["level"], spec.results["slow"]
    assert (spec.notes, slow.title) == ("for people", "Slow level")
    assert (level.time, level.rate_hz, level.rate_text) == ("clock", Fraction(1, 600), "10 min")
    assert level.rate_tolerance == Fraction(1, 1000)
    assert level.channels == Channels("gauge", (3, "up", 1.5))
    assert level.missing == Missing("spread")
    low = spec.filters["low"]
    assert low.settings == {
        "order": 4,
        "shape": "band-stop",
        "corners": (Fraction(2, 86400), Fraction(4, 86400)),
    }
    assert type(low.settings["order"]) is int
    assert low.settle == 1
    assert low.bands == (Band(0.0, 1 / 86400, 1.0, 0.5, False),)
    assert spec.filters["mean"].settings == {"length": Amount("1 h", seconds=Fraction(3600))}
    assert spec.filters["shaped"].settings["window"] == ("general_cosine", (0.5, 0.25))
    assert spec.filters["given"].settings == {"taps": (1.0, -2.5, 0.001)}
    assert slow.through == ("low", "mean", "shaped", "given", "mean")
    assert slow.bands == (Band(0.0, None, 0.0, -1.0, True),)
    assert slow.chunks == {"clock": 100, "gauge": 1}
    day = Amount("1 day", seconds=Fraction(86400))
    assert spec.blocks == Blocks(hop=None, latency=day, precision="float32")


def test_hop_is_heeded():
    spec = read(SOUND + "blocks: {hop: 1 min}\n")
    assert spec.blocks.hop == Amount("1 min", seconds=Fraction(60))


def test_windows_by_one_name_or_with_parameters():
    filter = "{method: window, window: WINDOW, length: 9 samples, shape: low-pass, corners: [9 Hz]}"
    for stated, kept in {
        "hann": ("hann",),
        "[hann]": ("hann",),
        "[kaiser, 8.0]": ("kaiser", 8.0),
        "[taylor, 4, 30]": ("taylor", 4, 30),
        "[exponential, null, 3.0]": ("exponential", None, 3.0),
    }.items():
        text = with_("{method: notch, centre: 50 Hz, width: 2 Hz}", filter)
        hum = read(text.replace("WINDOW", stated)).filters["hum"]
        assert hum.settings["window"] == kept
        design_filter(hum, Fraction(1000), "causal")


def test_what_is_unused_is_a_warning_with_its_place():
    text = with_("filters:\n", "  spare: {variable: v, sample_rate: 2 Hz}\nfilters:\n").replace(
        "results:\n", "  odd: {method: taps, taps: [1]}\nresults:\n"
    )
    text = text.replace("ends: hold", "ends: hold, chunks: {tmie: 5, geophone: 2}")
    assert read(text).warnings == (
        "weir.yaml:5:3: signal spare is not used by any result",
        "weir.yaml:8:3: filter odd is not used by any result",
        "weir.yaml:10:77: chunks: is the dimension tmie meant to be time?",
    )


def test_a_filter_is_held_to_the_rate_of_each_of_its_signals():
    text = with_("filters:\n", "  slow: {variable: v, sample_rate: 90 Hz}\nfilters:\n")
    assert read(text).signals["slow"].rate_hz == 90  # not used: nothing to hold it to
    (told,) = refused(
        text + "  slow_clean: {from: slow, through: [hum], timing: causal, ends: hold}\n"
    )
    assert told.startswith("weir.yaml:7:32: centre: 50 Hz; below half the sample rate of signal sl")


def test_text_and_paths_are_told_apart(tmp_path):
    path = tmp_path / "weir.yaml"
    path.write_text(SOUND)
    assert read_spec(str(path)).results == read_spec(SOUND).results
    assert read_spec(SOUND).file == "<text>"
    for bad in (tmp_path / "absent.yaml", tmp_path, Path("a\0b")):
        with pytest.raises(SpecError, match="cannot be read") as caught:
            read_spec(bad)
        assert caught.value.problems[0].where == str(bad)


# ---------------------------------------------------------------- taps from a file


def with_file(name: str, content: bytes, folder: Path) -> str:
    (folder / name).write_bytes(content)
    digest = hashlib.sha256(content).hexdigest()
    return with_("notch, centre: 50 Hz, width: 2 Hz", f"taps, file: {name}, sha256: {digest}")


def npy(array: np.ndarray) -> bytes:
    stream = BytesIO()
    np.save(stream, array)
    return stream.getvalue()


@pytest.mark.parametrize(
    ("name", "content"),
    [
        ("t.npy", npy(np.array([0.25, 0.5, 0.25]))),
        ("t.npy", npy(np.array([0.25, 0.5, 0.25], "f4"))),
        ("t.csv", b"0.25,0.5,0.25\n"),
        ("t.csv", b"# taps\n0.25\n0.5 # middle\n\n25e-2\n"),
    ],
)
def test_taps_come_from_a_file_beside_the_spec(tmp_path, name, content):
    spec = read(with_file(name, content, tmp_path), tmp_path)
    assert spec.filters["hum"].settings["taps"] == (0.25, 0.5, 0.25)
    assert "file" not in spec.filters["hum"].settings
    assert spec.filters["hum"].place("taps") == "weir.yaml:6:29"


@pytest.mark.parametrize(
    ("name", "content", "told"),
    [
        ("t.npy", npy(np.ones((2, 2))), "file: t.npy holds float64 of shape (2, 2)"),
        ("t.npy", npy(np.array([1j])), "file: t.npy holds complex128"),
        ("t.npy", npy(np.array(["a"])), "file: t.npy holds <U1"),
        ("t.npy", npy(np.array([], float)), "file: t.npy holds no taps"),
        ("t.npy", npy(np.array([0.0, np.nan])), "file: tap 1 of t.npy is nan"),
        ("t.npy", npy(np.ones(9))[:-8], "file: t.npy cannot be read"),
        ("t.npy", b"not an array", "file: t.npy cannot be read"),
        ("t.npy", b"", "file: t.npy cannot be read"),
        ("t.csv", b"", "file: t.csv holds no taps"),
        ("t.csv", b"tap\n1\n", "file: line 1 of t.csv holds tap"),
        ("t.csv", b"1,,2\n", "file: line 1 of t.csv holds nothing between two commas"),
        ("t.csv", b"1\ninf\n", "file: tap 1 of t.csv is inf"),
        ("t.csv", b"\xff\n", "file: t.csv is not UTF-8 text"),
        ("t.csv", b"0, 0\n", "file: the taps in t.csv are all 0"),
    ],
)
def test_a_file_without_taps_is_refused_at_its_place(tmp_path, name, content, told):
    (line,) = refused(with_file(name, content, tmp_path), tmp_path)
    assert line.startswith(f"weir.yaml:6:29: {told}")


def test_a_file_that_promises_more_than_it_holds_is_refused(tmp_path):
    header = json.dumps({"descr": "<f8"}).replace("}", ', "fortran_order": False, ')
    header += '"shape": (1000000000000,)}'
    content = b"\x93NUMPY\x01\x00" + len(header).to_bytes(2, "little") + header.encode()
    (line,) = refused(with_file("t.npy", content, tmp_path), tmp_path)
    assert "t.npy cannot be read" in line


def test_a_changed_file_is_refused_with_its_digest(tmp_path):
    text = with_file("t.csv", b"1\n", tmp_path)
    (tmp_path / "t.csv").write_bytes(b"2\n")
    (line,) = refused(text, tmp_path)
    assert line.startswith("weir.yaml:6:44: sha256: the file t.csv has the digest 53c234e5e847")


@pytest.mark.parametrize("name", ["/etc/t.csv", "../t.csv", "a/../../t.csv", "absent.csv"])
def test_only_files_beside_the_spec_are_read(tmp_path, name):
    old = "notch, centre: 50 Hz, width: 2 Hz"
    text = with_(old, f"taps, file: {name}, sha256: {'a' * 64}")
    (line,) = refused(text, tmp_path)
    assert line.startswith(f"weir.yaml:6:29: file: {name}")
    (line,) = refused(text, None)
    assert "but the spec is no file" in line


def test_reading_a_plain_spec_loads_no_units_library_and_no_numpy():
    path = EXAMPLES / "hum-out-gravel-band.yaml"
    code = (
        "import sys; from pipeline_filters.spec import read_spec\n"
        "assert not {'yaml', 'jsonschema'} & set(sys.modules)\n"
        f"read_spec({str(path)!r})\n"
        "assert not {'pint', 'numpy', 'scipy'} & set(sys.modules)"
    )
    subprocess.run([sys.executable, "-c", code], check=True)
