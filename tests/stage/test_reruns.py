"""Runs: what is missing is made, and nothing more; refusals leave nothing in the way."""

from __future__ import annotations

import numpy as np
import pytest
import zarr

from pipeline_filters import open_product, run
from pipeline_filters.errors import ProductError, SourceError

SPEC = """\
spec_version: 1
title: runs
signals: {plate: {variable: velocity, sample_rate: 1 kHz, missing: MISSING}}
filters: {mean: {method: moving-average, length: 5 samples}}
results:
  mean: {from: plate, through: [mean], timing: aligned, ends: hold}
blocks: {hop: 100 samples}
"""
REFUSING = SPEC.replace("MISSING", "refuse")
SPREADING = SPEC.replace("MISSING", "spread")


def source(path, missing_at: int) -> str:
    group = zarr.open_group(str(path), mode="w")
    values = np.arange(40_000.0)
    values[missing_at] = np.nan
    group.create_array("velocity", data=values, chunks=(1000,), dimension_names=["time"])
    return str(path)


def test_a_refusal_before_anything_is_made_leaves_nothing_in_the_way(tmp_path):
    path, product = source(tmp_path / "s.zarr", 10), tmp_path / "p.zarr"
    with pytest.raises(SourceError, match="missing sample"):
        run(REFUSING, path, product)
    assert not product.exists()
    run(SPREADING, path, product)
    assert np.flatnonzero(np.isnan(open_product(product)["mean"])).tolist() == [8, 9, 10, 11, 12]


def test_a_refusal_later_keeps_what_is_done(tmp_path):
    path, product = source(tmp_path / "s.zarr", 39_990), tmp_path / "p.zarr"
    with pytest.raises(SourceError, match="missing sample"):
        run(REFUSING, path, product, span_samples=5000)
    assert open_product(product)["mean"].size >= 5000
    with pytest.raises(ProductError, match="another spec"):
        run(SPREADING, path, product)
    # Mended, the same spec goes on; what was done is not done again.
    zarr.open_array(path + "/velocity", mode="r+")[39_990] = 39_990.0
    record = run(REFUSING, path, product, span_samples=5000)
    assert record["results"]["mean"]["spans_done_before"] >= 1
    np.testing.assert_allclose(open_product(product)["mean"][2:-2], np.arange(2.0, 39_998))


def test_a_result_more_leaves_the_others_as_they_are(tmp_path):
    path, product = source(tmp_path / "s.zarr", 10), tmp_path / "p.zarr"
    run(SPREADING, path, product)
    more = SPREADING.replace(
        "blocks:", "  late: {from: plate, through: [mean], timing: causal, ends: zero}\nblocks:"
    )
    record = run(more, path, product)
    assert "spans_run" not in record["results"]["mean"]
    assert record["results"]["late"]["spans_run"] >= 1
    assert set(open_product(product).data_vars) == {"mean", "late"}
    refusing = more.replace("spread", "refuse").replace("  mean: {from", "  other: {from")
    with pytest.raises(ProductError):
        run(refusing, path, product)


def test_two_signals_of_two_rates_open_as_a_tree(tmp_path):
    path = source(tmp_path / "s.zarr", 10)
    group = zarr.open_group(path, mode="r+")
    group.create_array("level", data=np.arange(50.0), chunks=(20,), dimension_names=["minute"])
    text = (
        SPREADING.replace(
            "filters:",
            "  level: {variable: level, time: minute, sample_interval: 1 min}\nfilters:",
        )
        .replace("signals: {plate:", "signals:\n  plate:")
        .replace("spread}}", "spread}")
    )
    text = text.replace(
        "blocks:", "  tide: {from: level, through: [mean], timing: causal, ends: zero}\nblocks:"
    )
    run(text, path, tmp_path / "p.zarr")
    tree = open_product(tmp_path / "p.zarr")
    assert set(tree.children) == {"mean", "tide"}


@pytest.mark.parametrize(
    ("shape", "chunks", "shards", "keep"),
    [
        ((1050,), (100,), (2000,), ""),  # a shard longer than the young archive
        ((1000, 3), (100, 2), (1000, 4), ""),
        ((1000, 4), (100, 2), (1000, 4), ", channels: {dimension: c, keep: [1, 2, 3]}"),
    ],
)
def test_shards_that_pass_the_end(tmp_path, shape, chunks, shards, keep):
    group = zarr.open_group(str(tmp_path / "s.zarr"), mode="w")
    names = ["time", "c"][: len(shape)]
    values = np.random.default_rng(1).standard_normal(shape)
    group.create_array("velocity", data=values, chunks=chunks, shards=shards, dimension_names=names)
    if len(shape) > 1:
        group.create_array("c", data=np.arange(shape[1]), dimension_names=["c"])
    text = SPREADING.replace("missing: spread", f"missing: spread{keep}")
    for span_samples in (100, None):
        product = tmp_path / f"p{span_samples}.zarr"
        run(text, str(tmp_path / "s.zarr"), product, span_samples=span_samples)
        got = open_product(product)["mean"].values
        kept = values[:, 1:] if keep else values
        np.testing.assert_allclose(got[10], kept[8:13].mean(axis=0), rtol=1e-12)
        assert np.isfinite(got).all()


def test_a_sample_that_spoils_a_block_is_not_blamed_on_another(tmp_path):
    path = source(tmp_path / "s.zarr", 10)
    zarr.open_array(path + "/velocity", mode="r+")[50] = 1.7e308
    with pytest.raises(SourceError, match="a sample of the same block is too large"):
        run(SPREADING, path, tmp_path / "p.zarr")
