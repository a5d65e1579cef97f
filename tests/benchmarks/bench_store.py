"""Store to store, beside a plain dask copy and map_overlap, in one run; asserts nothing.

    python tests/benchmarks/bench_store.py [--gib 1] [--rounds 5] [--folder /dev/shm] [--json]

White noise, float32, 32 channels, chunks of 60,000 x 32, the default codec, whole process
walls: ours with 2 workers, the others with 2 dask threads. A ratio to the copy above 1 means
slower than it; a ratio of map_overlap to ours above 1 means that ours is faster.
"""

from __future__ import annotations

import argparse
import json
import os
import shutil
import statistics
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np
import zarr

CHANNELS, CHUNK, RATE = 32, 60_000, "1 kHz"
TAPS = (501, 5001)

SPEC = """\
spec_version: 1
title: bench
signals: {{noise: {{variable: noise, sample_rate: 1 kHz}}}}
filters: {{low: {{method: window, window: hann, length: {taps} samples, shape: low-pass,
  corners: [50 Hz]}}}}
results: {{low: {{from: noise, through: [low], timing: aligned, ends: zero}}}}
"""

COPY = """\
import sys, dask, dask.array as da
with dask.config.set(scheduler="threads", num_workers=2):
    da.to_zarr(da.from_zarr(sys.argv[1] + "/noise"), sys.argv[2])
"""

OVERLAP = """\
import sys, dask, dask.array as da, numpy as np
from scipy.signal import firwin, oaconvolve
taps = firwin(int(sys.argv[3]), 0.1)[:, None]
half = taps.shape[0] // 2
def filtered(block):
    return oaconvolve(block.astype("f8"), taps, mode="same", axes=0).astype("f4")
with dask.config.set(scheduler="threads", num_workers=2):
    x = da.from_zarr(sys.argv[1] + "/noise")
    y = da.map_overlap(filtered, x, depth={0: half, 1: 0}, boundary={0: 0, 1: "none"},
                       dtype="f4", meta=np.zeros((0, 0), "f4"))
    da.to_zarr(y, sys.argv[2])
"""

OURS = """\
import sys
from pipeline_filters.cli.entry import console
console()
"""


def make_source(path: Path, gib: float) -> int:
    samples = int(gib * 2**30 / 4 / CHANNELS) // CHUNK * CHUNK
    group = zarr.open_group(str(path), mode="w")
    array = group.create_array(
        "noise",
        shape=(samples, CHANNELS),
        chunks=(CHUNK, CHANNELS),
        dtype="f4",
        dimension_names=["time", "channel"],
    )
    rng = np.random.default_rng(1)
    for start in range(0, samples, CHUNK):
        array[start : start + CHUNK] = rng.standard_normal((CHUNK, CHANNELS), np.float32)
    return samples


def walled(code: str, arguments: list[str], target: Path) -> float:
    shutil.rmtree(target, ignore_errors=True)
    began = time.perf_counter()
    subprocess.run([sys.executable, "-c", code, *arguments], check=True, stdout=subprocess.DEVNULL)
    return time.perf_counter() - began


def main() -> None:
    parser = argparse.ArgumentParser()
    parser.add_argument("--gib", type=float, default=1.0)
    parser.add_argument("--rounds", type=int, default=5)
    parser.add_argument("--folder", default="/dev/shm" if os.path.isdir("/dev/shm") else None)
    parser.add_argument("--json", action="store_true")
    options = parser.parse_args()
    with tempfile.TemporaryDirectory(dir=options.folder) as folder:
        report = measured(Path(folder), options.gib, options.rounds)
    if options.json:
        print(json.dumps(report))
        return
    print(f"plain dask copy: {report['copy_seconds']:.2f} s")
    short, whole = report["peak_chunks"]
    print(
        f"a worker's peak above an idle interpreter: {whole:.1f} decoded chunks, "
        f"{short:.1f} for a source a quarter as long"
    )
    for row in report["rows"]:
        print(
            f"P {row['taps']:5d}: ours {row['ours_seconds']:.2f} s, {row['over_copy']:.2f} of the "
            f"copy; map_overlap {row['map_overlap_seconds']:.2f} s, ours is "
            f"{row['over_map_overlap']:.2f} times as fast"
        )


IDLE = """\
import pipeline_filters.graph.workers, pipeline_filters.source.zarr_source
import pipeline_filters.product.writer
from pipeline_filters.spans import peak_bytes
print(peak_bytes())
"""


def peak_chunks(folder: Path, spec: Path, gib: float) -> float:
    """The largest worker's peak above an idle interpreter, in decoded chunks."""
    source, target = folder / "memory.zarr", folder / "target.zarr"
    make_source(source, gib)
    shutil.rmtree(target, ignore_errors=True)
    ours = ["filter", str(spec), str(source), str(target), "--workers", "2", "--json"]
    command = [sys.executable, "-c", OURS, *ours]
    record = json.loads(subprocess.run(command, check=True, capture_output=True).stdout)
    idle = int(subprocess.run([sys.executable, "-c", IDLE], check=True, capture_output=True).stdout)
    shutil.rmtree(source)
    return (record["memory"]["peak_bytes_a_worker"] - idle) / (CHUNK * CHANNELS * 4)


def measured(folder: Path, gib: float, rounds: int) -> dict:
    source, target = folder / "source.zarr", folder / "target.zarr"
    samples = make_source(source, gib)
    specs = {taps: folder / f"{taps}.yaml" for taps in TAPS}
    for taps, path in specs.items():
        path.write_text(SPEC.format(taps=taps))
    memory = [peak_chunks(folder, specs[5001], gib * share) for share in (0.25, 1)]
    walls: dict[str, list[float]] = {}
    for _ in range(rounds):
        jobs = {"copy": (COPY, [str(source), str(target)])}
        for taps in TAPS:
            ours = ["filter", str(specs[taps]), str(source), str(target), "--workers", "2"]
            jobs[f"ours {taps}"] = (OURS, ours)
            jobs[f"overlap {taps}"] = (OVERLAP, [str(source), str(target), str(taps)])
        for name, (code, arguments) in jobs.items():
            walls.setdefault(name, []).append(walled(code, arguments, target))
    median = {name: statistics.median(times) for name, times in walls.items()}
    rows = [
        {
            "taps": taps,
            "ours_seconds": median[f"ours {taps}"],
            "map_overlap_seconds": median[f"overlap {taps}"],
            "over_copy": median[f"ours {taps}"] / median["copy"],
            "over_map_overlap": median[f"overlap {taps}"] / median[f"ours {taps}"],
        }
        for taps in TAPS
    ]
    return {
        "samples": samples,
        "copy_seconds": median["copy"],
        "rows": rows,
        "walls": walls,
        "peak_chunks": memory,
    }


if __name__ == "__main__":
    main()
