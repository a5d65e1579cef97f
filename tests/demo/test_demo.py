"""The demo keeps its word, runs again without harm, and touches nobody's folder."""

from __future__ import annotations

import json
import os
import shutil
import sys
import time
from pathlib import Path

import numpy as np
import pytest
import zarr

from pipeline_filters import open_product
from pipeline_filters.cli.entry import main
from pipeline_filters.demo import recording as invented
from pipeline_filters.demo.spec_text import RESULT, SPEC_TEXT
from pipeline_filters.demo.story import runs_of
from pipeline_filters.demo.telling import tell
from pipeline_filters.errors import CommandLineError, SurroundingsError


@pytest.fixture(scope="module")
def told(tmp_path_factory):
    began = time.monotonic()
    folder = tmp_path_factory.mktemp("demo") / "weir"
    return folder, tell(folder), time.monotonic() - began


@pytest.fixture
def copy(told, tmp_path):
    return shutil.copytree(told[0], tmp_path / "weir")


def contents(folder):
    return {
        str(path.relative_to(folder)): (path.read_bytes(), path.stat().st_mtime_ns)
        for path in sorted(Path(folder).rglob("*"))
        if path.is_file()
    }


def without_matplotlib(monkeypatch):
    monkeypatch.delitem(sys.modules, "pipeline_filters.demo.picture", raising=False)
    for name in [name for name in sys.modules if name.split(".")[0] == "matplotlib"]:
        monkeypatch.delitem(sys.modules, name)
    monkeypatch.setitem(sys.modules, "matplotlib", None)


def test_it_takes_no_more_than_15_seconds(told):
    assert told[2] < 15


def test_tones_go_down(told):
    down = {(tone["name"], tone["hz"]): tone["down_db"] for tone in told[1]["tones"]}
    assert set(down) == {("hum", 50), ("hum", 150), ("hum", 250), ("pump", 17)}
    assert min(down.values()) > 45
    assert min(down["hum", 250], down["pump", 17]) > 90


def test_a_tones_level_is_that_put_in(told):
    # Peak 0.4 mm/s, by a factor of 1 +- 0.3 for the cable: the median within 1 dB or so.
    hum = told[1]["tones"][0]
    assert hum["before_db"] == pytest.approx(20 * np.log10(0.4 / np.sqrt(2)), abs=1.5)


def test_impacts_keep_their_sample(told):
    impacts = told[1]["impacts"]
    assert impacts["count"] == len(invented.invent().impacts) > 80
    assert impacts["at_their_sample"] == impacts["count"]
    assert impacts["largest_shift_samples"] == 0
    assert impacts["at_their_sample_before"] < impacts["count"]
    assert impacts["peak_over_background_after"] > 5 * impacts["peak_over_background_before"]


def test_a_product_shifted_by_one_sample_would_be_told(told):
    from pipeline_filters.demo.folder import DemoFolder
    from pipeline_filters.demo.story import Evidence, _impacts, gather

    own = DemoFolder(told[0])
    seen = gather(invented.read(own.source), own.product)
    late = Evidence(
        seen.recording,
        np.roll(seen.after, 1, axis=0),
        seen.breaks,
        seen.hertz,
        seen.before_density,
        seen.after_density,
    )
    assert _impacts(late)["at_their_sample"] == 0
    assert _impacts(late)["largest_shift_samples"] == 1


def test_nothing_crosses_the_jump(told):
    jump = told[1]["jump"]
    assert jump["seconds"] == 37
    assert jump["stamps_kept"] is True
    assert jump["stretches"] == 2
    assert jump["filtered_alone"]["samples"] == invented.SAMPLES - invented.JUMP_AT
    assert jump["filtered_alone"]["samples_that_differ"] == 0
    assert 0 < jump["results_blank_before"] == jump["results_blank_after"] < 1000


def test_dropouts_are_bridged_or_marked(told):
    folder, record, _ = told
    dropouts = record["dropouts"]
    assert [run["samples"] for run in dropouts["runs"]] == [3, 5, 2, 60, 800]
    assert [run["bridged"] for run in dropouts["runs"]] == [True, True, True, False, False]
    # A longer run takes with it what the ends' blanks say of the support, on each side.
    support = record["jump"]["results_blank_after"]
    for run in dropouts["runs"]:
        expected = 0 if run["bridged"] else run["samples"] + 2 * support
        assert run["results_missing"] == expected
    assert dropouts["results_missing_elsewhere"] == 0
    after = open_product(folder / "filtered.zarr")[RESULT].sel(geophone=dropouts["geophone"])
    assert len(runs_of(np.isnan(after.values))) == 3 + 2  # the ends, the jump, two dropouts


def test_the_picture_is_a_png(told):
    folder, record, _ = told
    assert record["picture"] == {"drawn": True}
    assert (folder / "what-happened.png").read_bytes().startswith(b"\x89PNG")


def test_the_recording_is_the_same_whenever_it_is_made(told):
    kept, again = invented.read(told[0] / "recording.zarr"), invented.invent()
    assert np.array_equal(kept.values, again.values, equal_nan=True)
    assert np.array_equal(kept.stamps_ms, again.stamps_ms)
    assert kept.impacts == again.impacts


def test_impacts_lie_apart_and_within_the_stretches():
    impacts = invented.invent().impacts
    starts = np.array([impact.sample for impact in impacts])
    assert np.diff(starts).min() >= 100
    assert not np.any(np.abs(starts - invented.JUMP_AT) < 1000)


def test_run_again_it_keeps_all_and_says_the_same(copy):
    before = contents(copy)
    record = tell(copy)
    after = contents(copy)
    assert record["recording"]["state"] == "kept"
    assert record["filtered"]["state"] == "nothing to do"
    assert set(after) == set(before)
    for name in before:
        assert after[name][0] == before[name][0], name
        if name.startswith(("recording.zarr", "filtered.zarr/gravel_band", "gravel-band")):
            assert after[name][1] == before[name][1], name


def test_the_record_is_one_json_object(copy, capsys):
    assert main(["demo", str(copy), "--json", "--workers", "1"]) == 0
    out, err = capsys.readouterr()
    record = json.loads(out)
    assert err == ""
    assert list(record) == [
        *("record_version", "did", "folder", "recording", "filtered"),
        *("tones", "impacts", "jump", "dropouts"),
        *("paths", "picture", "next", "caution", "seconds"),
    ]
    assert (record["record_version"], record["did"]) == (1, "demo")
    assert set(record["paths"]) == {"recording", "spec", "product", "picture"}
    for path in record["paths"].values():
        assert Path(path).exists()


def test_without_matplotlib_the_rest_works(copy, capsys, monkeypatch):
    (copy / "what-happened.png").unlink()
    without_matplotlib(monkeypatch)
    assert main(["demo", str(copy), "--workers", "1"]) == 0
    out, err = capsys.readouterr()
    assert err == ""
    assert "left out" in out
    assert "pip install 'pipeline-filters[pictures]'" in out
    assert "89 of 89" in out
    assert not (copy / "what-happened.png").exists()


def test_what_is_said_ends_with_a_command_that_runs(copy, capsys, monkeypatch):
    monkeypatch.chdir(copy.parent)
    assert main(["demo", "weir", "--workers", "1"]) == 0
    out = capsys.readouterr().out.splitlines()
    assert [line.split(":")[0] for line in out[-6:]] == [
        *("recording", "spec", "product", "picture", "next", "caution")
    ]
    assert "delays and removes information" in out[-1]
    command = out[-2].split()[1:]
    assert command[:2] == ["pipeline-filters", "filter"]
    assert main([*command[1:], "--workers", "1"]) == 0
    first, again = (open_product(f"weir/{name}.zarr")[RESULT] for name in ("filtered", "again"))
    assert np.array_equal(first.values, again.values, equal_nan=True)
    assert main(["demo", "weir", "--workers", "1"]) == 0  # what lies beside is no harm


def test_a_foreign_folder_is_refused_untouched(tmp_path, capsys):
    (tmp_path / "notes.txt").write_text("mine")
    (tmp_path / "recording.zarr").mkdir()
    before = contents(tmp_path)
    assert main(["demo", str(tmp_path)]) == CommandLineError.exit_code
    out, err = capsys.readouterr()
    assert out == ""
    assert str(tmp_path) in err
    assert "name another folder" in err
    assert contents(tmp_path) == before


def test_a_file_in_the_way_is_refused(tmp_path):
    file = tmp_path / "weir"
    file.write_text("mine")
    with pytest.raises(CommandLineError, match="a file lies there"):
        tell(file)
    assert file.read_text() == "mine"


@pytest.mark.parametrize("mark", ["[]", "{}", "no JSON", '{"made_by": "someone"}'])
def test_another_ones_mark_is_no_demos(tmp_path, mark):
    (tmp_path / "made-by-demo.json").write_text(mark)
    with pytest.raises(CommandLineError, match="no demo's"):
        tell(tmp_path)
    assert os.listdir(tmp_path) == ["made-by-demo.json"]


def test_another_layout_is_refused(tmp_path):
    mark = {"made_by": "pipeline-filters demo", "layout": 99}
    (tmp_path / "made-by-demo.json").write_text(json.dumps(mark))
    with pytest.raises(CommandLineError, match="another version"):
        tell(tmp_path)


def test_a_changed_spec_is_kept_and_refused(copy):
    spec = copy / "gravel-band.yaml"
    spec.write_text(SPEC_TEXT.replace("width: 4 Hz", "width: 3 Hz"))
    before = contents(copy)
    with pytest.raises(CommandLineError, match="the spec was changed"):
        tell(copy)
    assert contents(copy) == before


@pytest.mark.parametrize("harm", ["no stamps", "no knowledge", "cut", "emptied"])
def test_a_harmed_recording_is_refused(copy, harm):
    source = copy / "recording.zarr"
    if harm == "no stamps":
        shutil.rmtree(source / "time")
    elif harm == "no knowledge":
        del zarr.open_group(str(source), mode="a").attrs["invented"]
    elif harm == "cut":
        zarr.open_array(str(source / "velocity"), mode="a").resize((5, 24))
    else:
        shutil.rmtree(source)
        source.mkdir()
    with pytest.raises(CommandLineError, match="not as the demo left it"):
        tell(copy)


def test_a_demo_that_was_stopped_goes_on(copy):
    (copy / "recording.zarr").rename(copy / "recording.zarr.partial")
    shutil.rmtree(copy / "filtered.zarr")
    (copy / "gravel-band.yaml").unlink()
    record = tell(copy)
    assert record["recording"]["state"] == "made"
    assert record["filtered"]["state"] == "done"
    assert not (copy / "recording.zarr.partial").exists()


def test_an_empty_folder_is_as_good_as_a_new_one(tmp_path):
    from pipeline_filters.demo.folder import DemoFolder

    DemoFolder(tmp_path).claim()
    assert sorted(os.listdir(tmp_path)) == ["gravel-band.yaml", "made-by-demo.json"]


def test_a_folder_under_a_file_is_the_surroundings_fault(tmp_path):
    (tmp_path / "file").write_text("")
    with pytest.raises(SurroundingsError, match="cannot be written"):
        tell(tmp_path / "file" / "weir")
