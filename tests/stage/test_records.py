"""Records hold to their schema; forecasts hold to what runs then use."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest
import zarr
from jsonschema import Draft202012Validator

from pipeline_filters import check, forecast, run
from pipeline_filters.cli.entry import main
from pipeline_filters.errors import BudgetError

SCHEMA = Path(__file__).parents[2] / "schemas" / "run-record.schema.json"
VALIDATOR = Draft202012Validator(json.loads(SCHEMA.read_text()))
SPEC = """\
spec_version: 1
title: records
signals: {plate: {variable: velocity, sample_rate: 1 kHz}}
filters:
  low:
    method: kaiser
    bands:
      - {to: 50 Hz, gain: 1, tolerance: 0.1 dB}
      - {from: 80 Hz, gain: 0, tolerance: -50 dB}
  hum: {method: notch, centre: 50 Hz, width: 2 Hz}
results:
  low: {from: plate, through: [low], timing: aligned, ends: hold, chunks: {channel: 3}}
  clean: {from: plate, through: [hum], timing: causal, ends: odd}
"""


def recorded(path, channels: int, chunks: tuple[int, int]) -> str:
    group = zarr.open_group(str(path), mode="w")
    values = np.random.default_rng(2).standard_normal((50_000, channels)).astype("f4")
    group.create_array("velocity", data=values, chunks=chunks, dimension_names=["time", "channel"])
    return str(path)


@pytest.fixture
def source(tmp_path) -> str:
    return recorded(tmp_path / "source.zarr", 8, (5000, 8))


def valid(record: dict) -> dict:
    again = json.loads(json.dumps(record, allow_nan=False))
    assert [error.message for error in VALIDATOR.iter_errors(again)] == []
    return again


def test_the_schema_is_one_and_describes_every_key():
    Draft202012Validator.check_schema(VALIDATOR.schema)

    def walk(node):
        for name, entry in node.get("properties", {}).items():
            assert "description" in entry or "$ref" in entry, name
            walk(entry)
        for entry in node.get("$defs", {}).values():
            walk(entry)

    walk(VALIDATOR.schema)


def test_every_record_is_valid(source, tmp_path):
    valid(check(SPEC))
    valid(check(SPEC, source))
    valid(forecast(SPEC, source, workers=2, budget_bytes=2**31))
    valid(run(SPEC, source, tmp_path / "p.zarr"))
    assert valid(run(SPEC, source, tmp_path / "p.zarr"))["state"] == "nothing to do"


def test_refusals_are_records_too(capsys):
    assert main(["check", "no-such.yaml", "--json"]) == 3
    record = valid(json.loads(capsys.readouterr().out))
    assert record["did"] == "refuse"
    assert record["exit_code"] == 3


def test_a_forecast_comes_true(source, tmp_path):
    said = forecast(SPEC, source)["results"]
    used = run(SPEC, source, tmp_path / "p.zarr")["results"]
    for name in ("low", "clean"):
        assert used[name]["spans_run"] == said[name]["spans"]
        wanted = said[name]["decodings_of_a_chunk"]
        assert used[name]["decodings_of_a_chunk_as_run"] == pytest.approx(wanted, rel=0.15)


def test_units_that_cut_a_chunk_are_told(tmp_path, capsys):
    path = recorded(tmp_path / "cut.zarr", 12, (50_000, 4))  # groups of 6 cut the middle one
    figures = forecast(SPEC, path)["results"]["low"]
    assert figures["decodings_of_a_chunk"] == pytest.approx(4 / 3)
    assert figures["decodings_with_the_chunks_of_the_source"] == 1
    spec = tmp_path / "spec.yaml"
    spec.write_text(SPEC)
    assert main(["forecast", str(spec), path]) == 0
    assert "in the product 1.00 times, which saves 25% of the decoding" in capsys.readouterr().out


def test_a_budget_takes_workers_away_and_at_last_refuses(source):
    one = forecast(SPEC, source, workers=1)["memory"]["forecast_bytes_a_worker"]
    assert forecast(SPEC, source, workers=8, budget_bytes=one)["memory"]["workers"] == 1
    assert forecast(SPEC, source, workers=8, budget_bytes=20 * one)["memory"]["workers"] == 8
    with pytest.raises(BudgetError, match="at least"):
        forecast(SPEC, source, budget_bytes=one - 1)
