"""Every example spec is checked, and run over an invented source that fits it, in both faces."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import xarray as xr

from pipeline_filters import check, compile_spec, read_spec, run
from pipeline_filters.cli.entry import main
from pipeline_filters.spec.model import Signal

EXAMPLES = Path(__file__).parent.parent / "example_specs"
SPECS = sorted(EXAMPLES.glob("*.yaml"))
SAMPLES = 6000
JUMP_AT = 4100  # where breaks are split
SHORT_RUN, LONG_RUN = slice(700, 702), slice(2500, 2540)  # missing, where a policy is stated
INFINITE_AT = 3300


def made_source(path: Path, signals: dict[str, Signal]) -> Path:
    """A store with every signal of a spec, its variable, rate, unit and channels as stated.

    It has all that the spec says it can take: jumps, missing samples, infinite ones.
    """
    rng = np.random.default_rng(20260301)
    dataset = xr.Dataset()
    for signal in signals.values():
        channels = len(signal.channels.keep) + 1 if signal.channels else 2
        values = rng.standard_normal((SAMPLES, channels)).cumsum(axis=0).astype("f4")
        if signal.missing.policy != "refuse":
            values[SHORT_RUN, 0] = values[LONG_RUN, 0] = np.nan
        if signal.infinite == "missing":
            values[INFINITE_AT, 1] = np.inf
        step_ns = 10**9 / signal.rate_hz
        assert step_ns.denominator == 1
        numbers = np.arange(SAMPLES)
        if signal.breaks == "split":
            numbers[JUMP_AT:] += 11
        stamps = np.datetime64("2026-03-01", "ns") + numbers * int(step_ns)
        other = signal.channels.dimension if signal.channels else "place"
        attrs = {"units": signal.unit} if signal.unit else {}
        dataset[signal.variable] = (signal.time, other), values, attrs
        dataset[signal.time] = (signal.time,), stamps
        if signal.channels:
            dataset[other] = (other,), np.array([*signal.channels.keep, "not kept"], object)
        dataset[signal.variable].encoding["chunks"] = (1000, 2)
    dataset.to_zarr(path, consolidated=False)
    return path


def missing_inputs(values: np.ndarray, bridge: int) -> np.ndarray:
    """Which samples of one stretch (time first) count as missing."""
    gone = ~np.isfinite(values)
    for channel in range(gone.shape[1]):
        edges = np.flatnonzero(np.diff(gone[:, channel], prepend=False, append=False))
        for start, stop in edges.reshape(-1, 2):
            if stop - start <= bridge and start > 0 and stop < len(values):
                gone[start:stop, channel] = False
    return gone


def missing_results(gone: np.ndarray, figures: dict, ends: str) -> np.ndarray:
    """Which results of one stretch are missing, by what the chain says of its support."""
    before, after = figures["support_before"], figures["support_after"]["samples"]
    # A recursion marks as many results after its new start as it takes to settle.
    settles = sum(stage.get("settle_samples", 0) for stage in figures["stages"])
    reach = settles if before is None else before["samples"]
    edge = ends == "blank"
    padded = np.pad(gone, ((reach, after), (0, 0)), constant_values=edge)
    windows = np.lib.stride_tricks.sliding_window_view(padded, reach + after + 1, axis=0)
    return windows.any(axis=-1)


def stretches(signal: Signal) -> list[slice]:
    if signal.breaks == "split":
        return [slice(0, JUMP_AT), slice(JUMP_AT, SAMPLES)]
    return [slice(0, SAMPLES)]


def test_there_are_examples():
    assert len(SPECS) >= 12


@pytest.mark.parametrize("path", SPECS, ids=lambda path: path.stem)
def test_the_command_line_finds_it_in_order(path, capsys):
    assert main(["check", str(path)]) == 0
    assert capsys.readouterr().out.endswith("The spec is in order.\n")


@pytest.mark.parametrize("path", SPECS, ids=lambda path: path.stem)
def test_it_runs_and_both_faces_give_the_same_bits(path, tmp_path):
    spec = read_spec(path)
    source = made_source(tmp_path / "source.zarr", dict(spec.signals))
    record = run(spec, source, tmp_path / "product")
    assert record["state"] == "done"

    dataset = xr.open_zarr(source, mask_and_scale=False, consolidated=False, chunks={})
    lazy = compile_spec(spec, dataset).results
    for name, result in spec.results.items():
        signal = spec.signals[result.signal]
        stored = xr.open_zarr(tmp_path / "product", group=name)
        node = lazy[name].to_dataset() if isinstance(lazy, xr.DataTree) else lazy
        values = stored[name].to_numpy()
        assert stored[name].dtype == np.dtype(result.keep_as or "float32")
        assert stored[name].attrs.get("units") == signal.unit
        assert node[name].to_numpy().tobytes() == values.tobytes()
        np.testing.assert_array_equal(node[signal.time], stored[signal.time])

        # Finite wherever the chain's support holds neither a missing sample nor a blank end.
        samples = dataset[signal.variable].to_numpy()[:, : values.shape[1]]
        figures = check(spec)["results"][name]
        bridge = signal.missing.bridge
        most = int(bridge.in_samples(signal.rate_hz)) if bridge else 0
        for part in stretches(signal):
            gone = missing_inputs(samples[part], most)
            wanted = missing_results(gone, figures, result.ends)
            np.testing.assert_array_equal(np.isnan(values[part]), wanted)
        assert np.isfinite(values).mean() > 0.5
        assert not np.isinf(values).any()
