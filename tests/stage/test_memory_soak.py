"""A long recording goes through the command line in a few hundred MiB, however long it is."""

from __future__ import annotations

import json
import threading
import time
from pathlib import Path

import numpy as np
import pytest
import zarr
from made_runs import START, begin, changed, spec_file
from stopped_runs import in_session

LENGTH, CHUNK = 100_000_000, 1_000_000
MOST_MIB = 400

# Overlap-add over hundreds of taps and a recursion, in one result each.
SPEC = changed(
    (
        "{method: moving-average, length: 5 samples}",
        "{method: moving-average, length: 501 samples}",
    ),
    (
        "ends: hold}",
        "ends: hold}\n  no_hum: {from: plate, through: [hum], timing: causal, ends: hold}",
    ),
    ("results:", "  hum: {method: notch, centre: 50 Hz, width: 5 Hz}\nresults:"),
)


@pytest.fixture(scope="module")
def long_source(tmp_path_factory):
    path = tmp_path_factory.mktemp("long") / "source.zarr"
    group = zarr.open_group(str(path), mode="w")
    made = {"dimension_names": ("time",), "shape": (LENGTH,), "chunks": (CHUNK,)}
    values = group.create_array("velocity", dtype="f4", **made)
    units = {"units": "milliseconds since 2026-03-01 00:00:00"}
    stamps = group.create_array("time", dtype="i8", attributes=units, **made)
    noise = np.random.default_rng(3)
    for start in range(0, LENGTH, CHUNK):
        values[start : start + CHUNK] = noise.normal(size=CHUNK).astype("f4")
        stamps[start : start + CHUNK] = np.arange(start, start + CHUNK)
    return path


class Peaks:
    """The largest resident memory (VmHWM) of each process of a session, looked at meanwhile."""

    def __init__(self, leader: int) -> None:
        self.of: dict[int, int] = {}
        self.leader = leader
        self._watching = True
        self._thread = threading.Thread(target=self._watch)
        self._thread.start()

    def _watch(self) -> None:
        while self._watching:
            for pid, _ in in_session(self.leader):
                try:
                    status = Path(f"/proc/{pid}/status").read_text()
                except (FileNotFoundError, ProcessLookupError):
                    continue
                if "VmHWM:" in status:
                    kib = int(status.split("VmHWM:")[1].split()[0])
                    self.of[pid] = max(self.of.get(pid, 0), kib)
            time.sleep(0.05)

    def mib(self) -> list[float]:
        self._watching = False
        self._thread.join()
        return sorted((kib / 1024 for kib in self.of.values()), reverse=True)


@pytest.mark.soak
@pytest.mark.parametrize("workers", [1, 2])
def test_a_hundred_million_samples(workers, long_source, tmp_path):
    spec, product = spec_file(tmp_path, SPEC), tmp_path / "product"
    began = time.monotonic()
    process = begin(
        "filter", spec, long_source, product, "--workers", workers, "--json", start=START
    )
    peaks = Peaks(process.pid)
    out, err = process.communicate(timeout=1200)
    seen = peaks.mib()
    assert (process.returncode, err) == (0, "")
    memory = json.loads(out)["memory"]
    told = {key: round(value / 2**20) for key, value in memory.items() if "bytes" in key and value}
    print(f"{workers} workers, {time.monotonic() - began:.0f} s: VmHWM {[round(x) for x in seen]}")
    print(f"record: {told} MiB")
    assert seen[0] < MOST_MIB
    assert memory["peak_bytes_a_worker"] < MOST_MIB * 2**20
    assert memory["peak_bytes_here"] < MOST_MIB * 2**20
    # What was forecast holds, and is not much more than what was used.
    assert memory["peak_bytes_a_worker"] <= memory["forecast_bytes_a_worker"]
