"""Refused specs and command lines: whole messages, held word for word; nothing is written."""

from __future__ import annotations

import pytest
from made_runs import MEAN, call, changed, refuses, spec_file, store, tree

MEAN_OF_5 = "{method: moving-average, length: 5 samples}"


def kaiser(*bands: str) -> tuple[str, str]:
    return MEAN_OF_5, "{method: kaiser, bands: [" + ", ".join(bands) + "]}"


PASS = "{to: 100 Hz, gain: 1, tolerance: 0.1 dB}"

# name: spec, exit code, message
SPECS = {
    "unknown key": (
        changed(("ends: hold", "ends: hold, colour: red")),
        3,
        "~/weir.yaml:8:70: smooth: unknown key colour; bands, chunks, ends, from, keep_as, notes, "
        "through, timing or title; remove it",
    ),
    "misspelt method": (
        changed(("moving-average", "moving-averag")),
        3,
        "~/weir.yaml:6:18: method: moving-averag; taps, moving-average, window, kaiser, "
        "equiripple, butterworth or notch; did you mean moving-average?",
    ),
    "crossing bands": (
        changed(kaiser(PASS, "{from: 50 Hz, gain: 0, tolerance: -60 dB}")),
        3,
        "~/weir.yaml:6:76: a band from 50 Hz that overlaps the one to 100 Hz; bands that do not "
        "overlap; move the edges apart",
    ),
    "an edge past half the rate": (
        changed(kaiser(PASS, "{from: 600 Hz, gain: 0, tolerance: -60 dB}")),
        3,
        "~/weir.yaml:6:83: from: 600 Hz; below half the sample rate of signal plate (1 kHz), "
        "500 Hz; state a lower frequency",
    ),
    "a claim that is missed": (
        changed((MEAN_OF_5, MEAN_OF_5[:-1] + ", bands: [{to: 100 Hz, gain: 1, tolerance: 1 dB}]}")),
        6,
        "~/weir.yaml:6:61: filter mean (moving-average) misses the band from 0 Hz to 100 Hz "
        "(gain 1): a deviation of 3.779 dB is reached at 100 Hz; 1 dB is allowed; change the "
        "filter's settings, or the claim that the band makes",
    ),
    "tolerances that no filter meets": (
        changed(kaiser(PASS, "{from: 100.001 Hz, gain: 0, tolerance: -200 dB}")),
        6,
        "~/weir.yaml:6:34: filter mean (kaiser), up to 65536 taps, misses the band from 0 Hz to "
        "100 Hz (gain 1): a deviation of 5.868 dB is reached at 100 Hz; 0.1 dB is allowed; widen "
        "the tolerance, or the room between the bands\n"
        "~/weir.yaml:6:76: filter mean (kaiser), up to 65536 taps, misses the band from 100.001 "
        "Hz to half the rate (gain 0): a level of -6.176 dB is reached at 100.001 Hz; -200 dB is "
        "allowed; widen the tolerance, or the room between the bands",
    ),
    "a recursion asked for aligned": (
        changed((MEAN_OF_5, "{method: notch, centre: 50 Hz, width: 5 Hz}"), ("causal", "aligned")),
        3,
        "~/weir.yaml:8:3: timing aligned, but filter mean is a recursion; aligned needs a "
        "constant delay, which only linear-phase taps have; state timing: causal or zero-phase, "
        "or use a filter of linear-phase taps",
    ),
    "an empty file": (
        "",
        3,
        "~/weir.yaml:1:1: nothing in it; a spec; start from one of the files in example_specs",
    ),
    "several at once": (
        changed(("1 kHz", "1000"), ("hold", "holt"), ("[mean]", "[men]")),
        3,
        "~/weir.yaml:4:44: sample_rate: 1000, a number without a unit; a frequency above 0 with "
        "its unit, such as 50 Hz, 1 kHz or 2 / day; write 1000 Hz if that is meant\n"
        "~/weir.yaml:8:35: through: no filter is named men; mean; did you mean mean?\n"
        "~/weir.yaml:8:63: ends: holt; zero, hold, even, odd or blank; did you mean hold?",
    ),
}


@pytest.mark.parametrize("name", SPECS)
def test_a_refused_spec_is_told_by_every_command(name, tmp_path, capsys):
    text, code, message = SPECS[name]
    spec = spec_file(tmp_path, text)
    source = store(tmp_path / "source.zarr")
    assert refuses(capsys, ["check", spec], code, tmp_path) == message
    slow = code == 6 and "kaiser" in text  # a design that is sought for long is sought once
    if not slow:
        assert refuses(capsys, ["forecast", spec, source], code, tmp_path) == message
        product = tmp_path / "product"
        assert refuses(capsys, ["filter", spec, source, product], code, tmp_path) == message


def test_a_spec_that_is_none(tmp_path, capsys):
    (tmp_path / "binary.yaml").write_bytes(bytes(range(256)))
    for name, message in {
        "binary.yaml": "~/binary.yaml:2:118: a byte 0x80 that is not UTF-8 text; a spec in UTF-8; "
        "name the spec itself, or save it as UTF-8",
        "absent.yaml": "~/absent.yaml: cannot be read: No such file or directory; a spec file; "
        "check the path",
        ".": "~: cannot be read: Is a directory; a spec file; check the path",
    }.items():
        assert refuses(capsys, ["check", tmp_path / name], 3, tmp_path) == message


# arguments after SPEC and SOURCE, or all of them: message
LINES = {
    "filt S S P": "command line: no command filt; did you mean filter?",
    "frobnicate": "command line: no command frobnicate; one of check, forecast, filter, demo",
    "filter S": "command line: the following arguments are required: SOURCE, PRODUCT; see "
    "pipeline-filters filter --help",
    "check S S S": "command line: unrecognized arguments: S; see pipeline-filters --help",
    "filter S S P --frob": "command line: unrecognized arguments: --frob; see "
    "pipeline-filters --help",
    "filter S S P --worker 2": "command line: unrecognized arguments: --worker 2; see "
    "pipeline-filters --help",
    "filter S S P --workers": "command line: argument --workers: expected one argument; see "
    "pipeline-filters filter --help",
    **{
        f"filter S S P --workers {count}": f"command line: argument --workers: '{count[:40]}' is "
        "no whole number from 1 to 4096; see pipeline-filters filter --help"
        for count in ("0", "-1", "two", "1.5", "4097", "9" * 50, "²")
    },
    "filter S S ''": "command line: argument PRODUCT: an empty path; see "
    "pipeline-filters filter --help",
    "forecast S ''": "command line: argument SOURCE: an empty path; see "
    "pipeline-filters forecast --help",
    "check ''": "command line: argument SPEC: an empty path; see pipeline-filters check --help",
    "filter S S P --memory plenty": "--memory: plenty; an amount of memory such as 512 MiB or "
    "2 GiB; begin with a plain number such as 1000",
    "filter S S P --memory 10": "--memory: 10, a number without a unit; an amount of memory such "
    "as 512 MiB or 2 GiB; write 10 MiB if that is meant",
}


@pytest.mark.parametrize("line", LINES)
def test_a_wrong_command_line(line, tmp_path, capsys, monkeypatch):
    monkeypatch.chdir(tmp_path)
    arguments = ["" if word == "''" else word for word in line.split(" ")]
    assert refuses(capsys, arguments, 2, tmp_path) == LINES[line]


def test_no_command_is_helped(capsys):
    said = call(capsys)
    assert said.code == 2
    assert said.out.startswith("usage: pipeline-filters")
    said = call(capsys, "--json")
    assert (said.code, said.record["exit_code"]) == (2, 2)


def test_a_shortened_json_is_not_taken(tmp_path, capsys):
    spec = spec_file(tmp_path)
    assert call(capsys, "check", spec, "--js").code == 2


def test_a_memory_that_holds_no_step_names_one_that_does(tmp_path, capsys):
    spec, source = spec_file(tmp_path), store(tmp_path / "source.zarr")
    arguments = ["filter", spec, source, tmp_path / "product", "--workers", 1, "--memory"]
    message = refuses(capsys, [*arguments, "1 KiB"], 2, tmp_path)
    assert message == (
        "--memory: 0.0009766 MiB cannot hold one step, which takes 163 MiB; at least 163 MiB for "
        "this spec and source; state --memory '163 MiB', or give the results smaller chunks"
    )
    assert call(capsys, *arguments, "163 MiB").code == 0


def test_chunks_along_a_dimension_that_is_not_there(tmp_path, capsys):
    spec = spec_file(tmp_path, changed(("ends: hold", "ends: hold, chunks: {tyme: 10, hour: 3}")))
    source = store(tmp_path / "source.zarr")
    for command in (["check", spec, source], ["filter", spec, source, tmp_path / "product"]):
        assert refuses(capsys, command, 3, tmp_path) == (
            "~/weir.yaml:8:3: chunks: its signal has no dimension hour; it has time, geophone; "
            "name one of them\n"
            "~/weir.yaml:8:3: chunks: its signal has no dimension tyme; it has time, geophone; "
            "did you mean time?"
        )


def test_a_defect_is_told_without_its_traceback(tmp_path, capsys, monkeypatch):
    def broken(*_, **__):
        raise ZeroDivisionError("of ours")

    monkeypatch.setattr("pipeline_filters.cli.check.check", broken)
    monkeypatch.setattr("tempfile.tempdir", str(tmp_path))
    said = call(capsys, "check", spec_file(tmp_path), "--json")
    assert said.code == 1
    assert said.record["exit_code"] == 1
    (file,) = tmp_path.glob("pipeline-filters-defect-*.txt")
    assert "ZeroDivisionError: of ours" in file.read_text()
    assert said.err == (
        f"a defect of this program (ZeroDivisionError); its traceback is in {file}; report it "
        "with that file\n"
    )


def test_memory_that_is_used_up(tmp_path, capsys, monkeypatch):
    def greedy(*_, **__):
        raise MemoryError

    monkeypatch.setattr("pipeline_filters.cli.check.check", greedy)
    assert refuses(capsys, ["check", spec_file(tmp_path)], 8, tmp_path) == (
        "the machine's memory is used up; run again with fewer --workers or a lower --memory, or "
        "end other programs"
    )


def test_what_is_taken_by_check_writes_nothing(tmp_path, capsys):
    spec, source = spec_file(tmp_path, MEAN), store(tmp_path / "source.zarr")
    before = tree(tmp_path)
    for command in (["check", spec], ["check", spec, source], ["forecast", spec, source]):
        said = call(capsys, *command, "--json")
        assert (said.code, said.err) == (0, "")
        assert said.record["did"] == command[0]
    assert tree(tmp_path) == before
