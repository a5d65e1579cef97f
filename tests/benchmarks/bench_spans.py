"""What a span costs beside its samples: very many tiny ones, end to end; asserts nothing.

    python tests/benchmarks/bench_spans.py [--spans 100000] [--workers 2] [--json]

Each span reads a chunk of 64 samples, filters it with 5 taps and writes one unit of the product;
all of opening, scheduling, digests, register and files counts.
"""

from __future__ import annotations

import argparse
import json
import os
import tempfile
import time
from pathlib import Path

import numpy as np
import zarr

from pipeline_filters import run

SAMPLES = 64
SPEC = """\
spec_version: 1
title: bench
signals: {noise: {variable: noise, sample_rate: 1 kHz}}
filters: {mean: {method: moving-average, length: 5 samples}}
results: {mean: {from: noise, through: [mean], timing: causal, ends: zero}}
blocks: {hop: 64 samples}
"""


def main() -> None:
    parser = argparse.ArgumentParser()
    parser.add_argument("--spans", type=int, default=100_000)
    parser.add_argument("--workers", type=int, default=2)
    parser.add_argument("--json", action="store_true")
    options = parser.parse_args()
    home = "/dev/shm" if os.path.isdir("/dev/shm") else None
    with tempfile.TemporaryDirectory(dir=home) as folder:
        group = zarr.open_group(str(Path(folder) / "source.zarr"), mode="w")
        array = group.create_array(
            "noise",
            shape=(SAMPLES * options.spans,),
            chunks=(SAMPLES,),
            dtype="f4",
            dimension_names=["time"],
        )
        rng = np.random.default_rng(1)
        step = SAMPLES * 5000
        for start in range(0, array.shape[0], step):
            stop = min(start + step, array.shape[0])
            array[start:stop] = rng.standard_normal(stop - start, np.float32)
        began = time.perf_counter()
        record = run(
            SPEC,
            Path(folder) / "source.zarr",
            Path(folder) / "product.zarr",
            workers=options.workers,
            span_samples=1,
        )
        seconds = time.perf_counter() - began
    spans = record["results"]["mean"]["spans_run"]
    report = {"spans": spans, "seconds": seconds, "ms_a_span": seconds / spans * 1000}
    print(
        json.dumps(report)
        if options.json
        else f"{spans:,} spans in {seconds:.1f} s: {report['ms_a_span']:.3f} ms each"
    )


if __name__ == "__main__":
    main()
