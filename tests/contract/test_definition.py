"""Random specs over random stores, stopped and taken up again, beside the plain definition."""

from __future__ import annotations

import json
import random
from itertools import pairwise

import numpy as np
import pytest
import xarray as xr
import zarr
from definition import filtered

from pipeline_filters import compile_spec, open_product, run
from pipeline_filters.errors import StoppedEarlyError

SPEC = """\
spec_version: 1
title: by the definition
signals: {{v: {{variable: v, sample_rate: 1 kHz, breaks: split, missing: {missing}}}}}
filters: {{f: {{method: taps, taps: {taps}}}}}
results: {{r: {{from: v, through: [f], timing: {timing}, ends: {ends}{chunks}}}}}
blocks: {{hop: {hop}}}
"""


class Case:
    """One random job: a recording, a spec, and what must come out."""

    def __init__(self, seed: int) -> None:
        self.dice = dice = random.Random(seed)
        rng = np.random.default_rng(seed)
        self.length = length = dice.choice([1, 2, 7, 50, 300, 1500, 5000])
        self.channels = dice.choice([1, 3, 5])
        self.samples = rng.standard_normal((length, self.channels))
        for _ in range(dice.choice([0, 0, 3, 10])):
            at = dice.randrange(length)
            lost = slice(at, at + dice.choice([1, 2, 5, 40]))
            self.samples[lost, dice.randrange(self.channels)] = np.nan
        self.jump = dice.choice([0, dice.randrange(length)])
        self.timing = dice.choice(["causal", "aligned", "zero-phase"])
        self.taps = rng.standard_normal(dice.choice([1, 2, 3, 8, 31, 64, 200])).round(6)
        if self.timing == "aligned":
            self.taps = (self.taps + self.taps[::-1]) / 2
        self.ends = dice.choice(["zero", "hold", "even", "odd", "blank"])
        self.bridge = dice.choice([0, 2, 5])

    def text(self) -> str:
        unit = self.dice.choice([0, 33, 1000])
        return SPEC.format(
            missing=f"{{bridge: {self.bridge} samples}}" if self.bridge else "spread",
            taps=json.dumps(self.taps.tolist()),
            timing=self.timing,
            ends=self.ends,
            chunks=f", chunks: {{time: {min(unit, self.length)}}}" if unit else "",
            hop=self.dice.choice(["auto", "1 sample", "37 samples", "200 samples"]),
        )

    def store(self, path: str) -> str:
        group = zarr.open_group(path, mode="w")
        small = self.dice.choice([7, 100, 1000]) if self.length < 5000 else 1000
        chunks = min(small, self.length), self.dice.choice([1, self.channels])
        group.create_array("v", data=self.samples, chunks=chunks, dimension_names=["time", "c"])
        stamps = np.arange(self.length)
        stamps[self.jump :] += self.dice.choice([2, 1000, 37_000])
        time = group.create_array("time", data=stamps, chunks=(400,), dimension_names=["time"])
        time.attrs["units"] = "milliseconds since 2026-01-01"
        return path

    def wanted(self) -> np.ndarray:
        taps, size = self.taps, self.taps.size
        lead = size // 2 if self.timing == "aligned" else 0
        if self.timing == "zero-phase":
            taps, lead = np.convolve(taps, taps[::-1]), size - 1
        stretches = [
            np.stack(
                [filtered(row, taps, lead, self.ends, self.bridge) for row in self.samples[a:b].T],
                axis=1,
            )
            for a, b in pairwise(sorted({0, self.jump, self.length}))
        ]
        return np.concatenate(stretches)


def holds(seed: int, folder) -> None:
    case = Case(seed)
    text, path, product = case.text(), case.store(str(folder / "s.zarr")), folder / "p.zarr"
    share = case.dice.choice([0.0, 0.3, 0.7])

    def stop(done: int, total: int) -> None:
        if share and done > share * total:
            raise KeyboardInterrupt

    try:
        run(text, path, product, progress=stop, span_samples=case.dice.choice([1, 100, None]))
    except StoppedEarlyError:
        run(text, path, product, span_samples=case.dice.choice([50, None]))
    got, wanted = open_product(product)["r"].values, case.wanted()
    np.testing.assert_array_equal(np.isnan(got), np.isnan(wanted))
    # Odd ends grow along a stretch much shorter than the taps, and errors with them.
    largest = np.nanmax(np.abs(case.samples), initial=1) * (3 * case.taps.size / case.length + 3)
    bound = 1e-14 * largest * np.abs(case.taps).sum() ** 2 + 1e-13
    assert np.nanmax(np.abs(got - wanted), initial=0) <= bound
    dataset = xr.open_zarr(path, mask_and_scale=False, consolidated=False, chunks=None)
    size = case.dice.choice([13, 133, case.length]) if case.length < 1000 else 333
    lazy = compile_spec(text, dataset.chunk(time=size)).results["r"].compute(scheduler="sync")
    assert lazy.values.tobytes() == got.tobytes()


@pytest.mark.parametrize("seed", range(30))
def test_a_random_job(seed, tmp_path):
    holds(seed, tmp_path)


@pytest.mark.soak
@pytest.mark.parametrize("seed", range(1000, 1400))
def test_many_random_jobs(seed, tmp_path):
    holds(seed, tmp_path)
