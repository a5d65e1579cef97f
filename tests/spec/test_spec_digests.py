"""A result's digest follows its numbers, and nothing else."""

from __future__ import annotations

import hashlib
import re

import pytest
from weir_spec import read

from pipeline_filters.spec.digests import result_digest

BASE = """\
spec_version: 1
title: Weir plate
signals:
  plate:
    variable: velocity
    sample_rate: 1 kHz
    channels: {dimension: geophone, keep: [g01, g02]}
    missing: {bridge: 5 samples}
filters:
  hum: {method: notch, centre: 50 Hz, width: 2 Hz}
  smooth: {method: window, window: [kaiser, 8], length: 21 samples, shape: low-pass, corners: [90 Hz]}
  band:
    method: kaiser
    bands:
      - {to: 15 Hz, gain: 0, tolerance: -60 dB}
      - {from: 25 Hz, gain: 1, tolerance: 0.1 dB}
results:
  clean:
    from: plate
    through: [hum, smooth, band]
    timing: zero-phase
    ends: hold
    chunks: {time: 6000}
blocks: {hop: 4096 samples}
"""  # noqa: E501


def digest(text: str, result: str = "clean") -> str:
    return result_digest(read(text), result)


def changed(*changes: tuple[str, str]) -> str:
    text = BASE
    for old, new in changes:
        assert re.search(old, text), old
        text = re.sub(old, new, text)
    return text


@pytest.mark.parametrize(
    "changes",
    [
        [("title: Weir plate", "title: Another title\nnotes: with remarks")],
        [("ends: hold", "ends: hold\n    title: For people\n    notes: too")],
        [("time: 6000", "time: 500")],
        [(r"    chunks: .*\n", "")],
        [("1 kHz", "1000 Hz")],
        [("sample_rate: 1 kHz", "sample_interval: 1 ms")],
        [("sample_rate: 1 kHz", "sample_rate: 1 kHz\n    unit: mm/s")],
        [("sample_rate: 1 kHz", "sample_rate: 1 kHz\n    rate_tolerance: 300 ppm")],
        [("5 samples", "5 ms")],
        [("21 samples", "0.021 s")],
        [("4096 samples", "4.096 s")],
        [("kaiser, 8]", "kaiser, 8.0]")],
        [("50 Hz, width: 2 Hz", "0.05 kHz, width: 2000 mHz")],
        [(r"\bhum\b", "mains")],
        [(r"\bplate\b:", "weir:"), ("from: plate", "from: weir")],
        [
            (
                r"\{method: notch, centre: 50 Hz, (width: 2 Hz)\}",
                r"{\1, centre: 50 Hz, method: notch}",
            )
        ],
        [("results:", "  spare: {method: taps, taps: [1]}\nresults:")],
        [
            (
                "results:",
                "results:\n  b: {from: plate, through: [hum], timing: causal, ends: odd}",
            )
        ],
        [("ends: hold", "ends: hold # a remark")],
        [("gain: 1,", "gain: 1.0,")],
        [("gain: 0,", "from: 0 Hz, gain: 0,")],
    ],
    ids=lambda changes: changes[0][1].strip()[:30],
)
def test_what_leaves_the_numbers_alone_leaves_the_digest(changes):
    text = changed(*changes)
    assert text != BASE
    assert digest(text) == digest(BASE)


@pytest.mark.parametrize(
    "changes",
    [
        [("velocity", "acceleration")],
        [("sample_rate: 1 kHz", "sample_rate: 1 kHz\n    time: clock")],
        [("1 kHz", "2 kHz")],
        [("dimension: geophone", "dimension: string")],
        [("g01, g02", "g02, g01")],
        [("g01, g02", "1, 2"), ("ends: hold", "ends: hold")],
        [("5 samples", "6 samples")],
        [(r"\{bridge: 5 samples\}", "spread")],
        [("missing:", "breaks: split\n    missing:")],
        [("missing:", "infinite: missing\n    missing:")],
        [("50 Hz, width", "50.1 Hz, width")],
        [("width: 2 Hz", "width: 2 Hz, settle: 0.1")],
        [("width: 2 Hz", "width: 2 Hz, bands: [{to: 9 Hz, gain: 1, tolerance: 1 dB}]")],
        [("kaiser, 8]", "kaiser, 9]")],
        [("21 samples", "22 samples")],
        [("0.1 dB", "0.2 dB")],
        [("0.1 dB", "0.1")],
        [("hum, smooth", "smooth, hum")],
        [("zero-phase", "causal")],
        [("ends: hold", "ends: odd")],
        [("ends: hold", "ends: hold\n    bands: [{to: 9 Hz, gain: 0, tolerance: -1 dB}]")],
        [("ends: hold", "ends: hold\n    keep_as: float64")],
        [("hop: 4096 samples", "hop: auto")],
        [("hop: 4096 samples", "latency: 4096 samples")],
        [("4096 samples", "4096 samples, precision: float32")],
    ],
    ids=lambda changes: changes[0][1].strip()[:30],
)
def test_what_changes_the_numbers_changes_the_digest(changes):
    assert digest(changed(*changes)) != digest(BASE)


def test_labels_of_other_types_are_other_channels():
    one, text = changed(("g01, g02", "1, 2")), changed(("g01, g02", "'1', '2'"))
    assert digest(one) != digest(text)


def test_the_same_taps_from_a_file_are_the_same_numbers(tmp_path):
    content = b"0.25, 0.5\n0.25\n"
    (tmp_path / "t.csv").write_bytes(content)
    sha256 = hashlib.sha256(content).hexdigest()
    inline = changed((r"hum: \{.*\}", "hum: {method: taps, taps: [0.25, 0.5, 0.25]}"))
    loaded = changed((r"hum: \{.*\}", f"hum: {{method: taps, file: t.csv, sha256: {sha256}}}"))
    assert result_digest(read(loaded, tmp_path), "clean") == digest(inline)


def test_a_digest_stays_what_it_was():
    # A change here means that every product out there belongs to another spec from now on:
    # only ever together with digests.MEANING.
    assert digest(BASE) == "72f7ade6e863eb4748a838b95dffafc9e07e98748f4a6cd79db4439095688fe9"
