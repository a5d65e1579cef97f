"""The gravel plate as spec and store, runs of the command line, and what they leave behind."""

from __future__ import annotations

import hashlib
import json
import os
import re
import subprocess
import sys
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import zarr

from pipeline_filters.cli.entry import main

ROOT = Path(__file__).parents[2]

MEAN = """\
spec_version: 1
title: Weir plate
signals:
  plate: {variable: velocity, sample_rate: 1 kHz}
filters:
  mean: {method: moving-average, length: 5 samples}
results:
  smooth: {from: plate, through: [mean], timing: causal, ends: hold}
"""
# A recursion hands its state from span to span; small blocks make many.
HUM = """\
spec_version: 1
title: Weir plate, hum and rumble
signals:
  plate: {variable: velocity, sample_rate: 1 kHz, missing: spread}
filters:
  hum: {method: notch, centre: 50 Hz, width: 5 Hz}
  mean: {method: moving-average, length: 21 samples}
results:
  no_hum: {from: plate, through: [hum], timing: causal, ends: hold}
  smooth: {from: plate, through: [mean], timing: zero-phase, ends: even}
blocks: {hop: 100 samples}
"""


@dataclass
class Said:
    """What a run of the command line said."""

    code: int
    out: str
    err: str

    @property
    def record(self) -> dict[str, Any]:
        return json.loads(self.out)


def call(capsys, *arguments: object) -> Said:
    """A run in this process."""
    code = main([str(argument) for argument in arguments])
    out, err = capsys.readouterr()
    return Said(code, out, err)


START = "from pipeline_filters.cli.entry import console; console()"
# Small spans, and a register that is written after each: much to be interrupted.
SMALL_STEPS = (
    "import pipeline_filters.stage.running as r, pipeline_filters.stage.compiling as c; "
    "r.FLUSH_SECONDS = -1; c.SPAN_SAMPLES = 2000; "
)


def begin(*arguments: object, start: str = SMALL_STEPS + START, **options: Any) -> Any:
    """A run in a process of its own, in a session of its own."""
    paths = [str(ROOT), *filter(None, [os.environ.get("PYTHONPATH")])]
    return subprocess.Popen(
        [sys.executable, "-W", "error", "-c", start, *map(str, arguments)],
        env={**os.environ, "PYTHONPATH": os.pathsep.join(paths)},
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        start_new_session=True,
        **options,
    )


def ended(process: Any) -> Said:
    out, err = process.communicate(timeout=60)
    return Said(process.returncode, out, err)


def spec_file(folder: Path, text: str = MEAN, name: str = "weir.yaml") -> Path:
    file = folder / name
    file.write_text(text)
    return file


def changed(*pairs: tuple[str, str], of: str = MEAN) -> str:
    """A spec with pieces of its text exchanged."""
    for old, new in pairs:
        assert of.count(old) == 1, old
        of = of.replace(old, new)
    return of


def plate(length: int = 1000, channels: int = 2, seed: int = 1) -> np.ndarray:
    """Noise with a hum, float32, time first."""
    clock = np.arange(length)[:, None] / 1000
    noise = np.random.default_rng(seed).normal(size=(length, channels))
    return (noise + np.sin(2 * np.pi * 50 * clock)).astype("f4")


def store(
    path: Path,
    values: np.ndarray | None = None,
    stamps: np.ndarray | str | None = "even",
    *,
    chunks: tuple[int, ...] = (250, 1),
    fill_value: float = 0.0,
    units: str | None = "milliseconds since 2026-03-01 00:00:00",
    **attrs: Any,
) -> Path:
    """A source with ``velocity`` over time and geophone."""
    values = plate() if values is None else values
    group = zarr.open_group(str(path), mode="w")
    dims = ("time", "geophone")[: values.ndim]
    array = group.create_array(
        "velocity",
        shape=values.shape,
        dtype=values.dtype,
        chunks=tuple(max(1, min(pair)) for pair in zip(chunks, values.shape, strict=False)),
        fill_value=fill_value,
        dimension_names=dims,
        attributes=attrs,
    )
    if values.size:
        array[...] = values
    if stamps is not None:
        marks = np.arange(values.shape[0]) if isinstance(stamps, str) else stamps
        time = group.create_array(
            "time",
            shape=marks.shape,
            dtype=marks.dtype,
            chunks=(max(1, min(400, marks.size)),),
            dimension_names=("time",),
            attributes={} if units is None else {"units": units},
        )
        if marks.size:
            time[...] = marks
    return path


def tree(path: Path) -> dict[str, str]:
    """Every file and folder below a path, with its bytes and time of change."""
    return {
        str(one.relative_to(path)): "folder"
        if one.is_dir()
        else f"{hashlib.sha256(one.read_bytes()).hexdigest()} {one.stat().st_mtime_ns}"
        for one in sorted(path.rglob("*"))
    }


def bits(product: Path) -> dict[str, str]:
    """Results, stamps, coefficients and digests of a product, as stored: what runs must agree on.

    Histories tell the time of day, and the register's place of versions is one of them.
    """
    return {
        name: hashlib.sha256((product / name).read_bytes()).hexdigest()
        for name in sorted(tree(product))
        if re.search(r"/c(/\d+)*$", name) and (product / name).is_file()
    }


def smooth(product: Path, name: str = "smooth") -> np.ndarray:
    return np.asarray(zarr.open_array(str(product / name / name), mode="r")[...])


def refuses(capsys, arguments: list[object], code: int, folder: Path) -> str:
    """Asserts a refusal that leaves every file below ``folder`` as it was.

    Twice, in words and as JSON: nothing but one record in stdout, and the same problems.

    Returns:
        the words, with ``folder`` as ``~``.
    """
    before = tree(folder)
    words = call(capsys, *arguments)
    told = call(capsys, *arguments, "--json")
    assert tree(folder) == before
    assert (words.code, words.out) == (code, ""), words.err
    assert (told.code, told.err) == (code, words.err)
    record = told.record
    assert record["did"] == "refuse"
    assert record["exit_code"] == code
    assert len(record["problems"]) >= 1
    lines = [
        "; ".join(filter(None, (one["found"], one["allowed"], one["remedy"])))
        for one in record["problems"]
    ]
    places = [one["where"] for one in record["problems"]]
    assert words.err.splitlines() == [
        f"{where}: {line}" if where else line for where, line in zip(places, lines, strict=True)
    ]
    assert "Traceback" not in words.err
    return words.err.replace(str(folder), "~").rstrip("\n")
