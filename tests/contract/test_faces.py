"""The numbers law end to end: both faces, all chunks, spans and workers give the same bits."""

from __future__ import annotations

import numpy as np
import pytest
import xarray as xr
import zarr
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from pipeline_filters import compile_spec, open_product, read_spec, run
from pipeline_filters.chain.building import design_chains
from pipeline_filters.stream import whole_stretch

LENGTH = 1500
JUMP = 900
CHAINS = {
    "taps": "[smooth]",
    "even": "[even]",
    "recursion": "[hum]",
    "mixed": "[hum, smooth]",
    "taps-first": "[smooth, hum]",
}
SPEC = """\
spec_version: 1
title: contract
signals:
  plate:
    variable: velocity
    sample_rate: 1 kHz
    breaks: split
    missing: {missing}
    infinite: missing
filters:
  hum: {{method: notch, centre: 50 Hz, width: 20 Hz}}
  smooth: {{method: window, window: hamming, length: 41 samples, shape: low-pass, corners: [90 Hz]}}
  even: {{method: moving-average, length: 8 samples}}
results:
  out: {{from: plate, through: {through}, timing: {timing}, ends: {ends}, keep_as: float64{chunks}}}
blocks: {{hop: {hop}}}
"""
TIMINGS = {
    "taps": ["causal", "aligned", "zero-phase"],
    "even": ["causal", "aligned"],
    "recursion": ["causal", "zero-phase"],
    "mixed": ["causal", "zero-phase"],
    "taps-first": ["causal"],
}


def samples(dtype: str, dims: int) -> tuple[np.ndarray, dict]:
    rng = np.random.default_rng(8)
    shape = {1: (LENGTH,), 2: (LENGTH, 3), 3: (LENGTH, 2, 3)}[dims]
    values = rng.standard_normal(shape)
    first = values.reshape(LENGTH, -1)
    if dtype.startswith("i"):
        raw = np.round(values * 1000).astype(dtype)
        raw.reshape(LENGTH, -1)[[100, 101, 700], 0] = -9999
        return raw, {"scale_factor": 0.001, "add_offset": 2.0, "missing_value": -9999}
    first[[100, 101, 700], 0] = np.nan
    first[400, -1] = np.inf
    return values.astype(dtype), {}


def store(path, raw, attrs, chunks, time_dim) -> str:
    names = [f"c{n}" for n in range(raw.ndim - 1)]
    moved = np.moveaxis(raw, 0, time_dim)
    names.insert(time_dim, "time")
    group = zarr.open_group(str(path), mode="w")
    sizes = [min(n, 2) for n in moved.shape]
    sizes[time_dim] = chunks
    array = group.create_array(
        "velocity",
        shape=moved.shape,
        dtype=moved.dtype,
        chunks=tuple(sizes),
        dimension_names=names,
    )
    array[...] = moved
    array.attrs.update(attrs)
    stamps = np.arange(LENGTH) + np.where(np.arange(LENGTH) >= JUMP, 37_000, 0)
    time = group.create_array("time", data=stamps, chunks=(400,), dimension_names=["time"])
    time.attrs["units"] = "milliseconds since 2026-03-01"
    return str(path)


def reference(spec_text: str, raw: np.ndarray, attrs: dict) -> np.ndarray:
    """Whole stretches in memory, without chunks, spans or stores: (time, channels)."""
    chain = design_chains(read_spec(spec_text))["out"]
    rows = raw.reshape(LENGTH, -1).T.astype(float)
    if attrs:
        wrong = rows == attrs["missing_value"]
        rows = rows * attrs["scale_factor"] + attrs["add_offset"]
        rows[wrong] = np.nan
    rows[np.isinf(rows)] = np.nan
    parts = []
    first = 1_772_323_200_000  # 2026-03-01, in samples of 1 kHz
    for start, stop, number in [(0, JUMP, first), (JUMP, LENGTH, first + JUMP + 37_000)]:
        slab = whole_stretch(chain, rows[:, start:stop], number)
        values = slab.values.copy()
        if slab.missing is not None:
            values[slab.missing] = np.nan
        parts.append(values)
    return np.concatenate(parts, axis=1).T


cases = st.fixed_dictionaries(
    {
        "chain": st.sampled_from(sorted(CHAINS)),
        "ends": st.sampled_from(["zero", "hold", "even", "odd", "blank"]),
        "missing": st.sampled_from(["spread", "{bridge: 2 samples}"]),
        "hop": st.sampled_from(["auto", "1 sample", "37 samples"]),
        "dtype": st.sampled_from(["f4", "f8", "i2", "i4"]),
        "dims": st.integers(1, 3),
        "chunk": st.sampled_from([1500, 400, 61, 7]),
        "unit": st.sampled_from([0, 1, 50, 499, 1500]),
        "span": st.sampled_from([1, 1000, None]),
    }
)


@given(cases, st.data())
@settings(
    max_examples=25, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
def test_bits_depend_on_spec_and_data_alone(tmp_path_factory, case, data):
    folder = tmp_path_factory.mktemp("contract")
    timing = data.draw(st.sampled_from(TIMINGS[case["chain"]]))
    time_dim = data.draw(st.integers(0, case["dims"] - 1))
    chunks = f", chunks: {{time: {case['unit']}}}" if case["unit"] else ""
    text = SPEC.format(
        missing=case["missing"],
        through=CHAINS[case["chain"]],
        timing=timing,
        ends=case["ends"],
        hop=case["hop"],
        chunks=chunks,
    )
    raw, attrs = samples(case["dtype"], case["dims"])
    path = store(folder / "source.zarr", raw, attrs, case["chunk"], time_dim)
    run(text, path, folder / "product.zarr", span_samples=case["span"])
    product = open_product(folder / "product.zarr")["out"]
    got = np.moveaxis(product.values, time_dim, 0)
    wanted = reference(text, raw, attrs)
    assert got.reshape(LENGTH, -1).tobytes() == wanted.tobytes()
    dataset = xr.open_zarr(path, mask_and_scale=False, consolidated=False, chunks={})
    lazy = compile_spec(text, dataset).results["out"].compute(scheduler="sync")
    assert np.moveaxis(lazy.values, time_dim, 0).reshape(LENGTH, -1).tobytes() == wanted.tobytes()
    assert lazy.time.equals(product.time)


@pytest.mark.parametrize("through", ["[smooth]", "[hum, smooth]"])
def test_worker_processes_change_nothing(tmp_path, through):
    raw, attrs = samples("f4", 2)
    text = SPEC.format(
        missing="spread", through=through, timing="causal", ends="odd", hop="auto", chunks=""
    )
    path = store(tmp_path / "source.zarr", raw, attrs, 61, 0)
    for workers in (2, 3):
        run(text, path, tmp_path / f"{workers}.zarr", workers=workers, span_samples=500)
        got = open_product(tmp_path / f"{workers}.zarr")["out"].values
        assert got.tobytes() == reference(text, raw, attrs).tobytes()


def test_a_start_elsewhere_changes_only_the_end(tmp_path):
    raw, attrs = samples("f8", 2)
    text = SPEC.format(
        missing="spread",
        through="[smooth]",
        timing="aligned",
        ends="odd",
        hop="50 samples",
        chunks="",
    )
    path = store(tmp_path / "source.zarr", raw, attrs, 400, 0)
    dataset = xr.open_zarr(path, mask_and_scale=False, consolidated=False, chunks={})
    whole = compile_spec(text, dataset).results["out"].values
    later = compile_spec(text, dataset.isel(time=slice(1000, None))).results["out"].values
    # 20 samples of support; blocks of the grid that begin before the start differ in their bits.
    reach = design_chains(read_spec(text))["out"].reach().block_reach[0]
    np.testing.assert_allclose(later[20:], whole[1020:], rtol=0, atol=1e-12)
    assert reach < 200
    tail = slice(reach, None)
    assert later[tail].tobytes() == whole[1000:][tail].tobytes()
