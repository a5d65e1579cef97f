"""Runs store to store: the same bits however they are run, and whatever refuses a write."""

from __future__ import annotations

import errno
import os
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from made_runs import HUM, ROOT, bits, changed, plate, smooth, spec_file, store, tree

from pipeline_filters.errors import FilterStageError, SourceError, SurroundingsError
from pipeline_filters.stage.running import run


@pytest.fixture(scope="module")
def whole(tmp_path_factory):
    """Spec, source, and the bits of a run by one worker."""
    folder = tmp_path_factory.mktemp("whole")
    values = plate(6000, 3)
    values[2000:2010, 1] = np.nan
    spec = spec_file(folder, HUM)
    source = store(folder / "source.zarr", values, chunks=(500, 2))
    run(spec, source, folder / "product")
    return spec, source, bits(folder / "product")


@pytest.mark.parametrize(("workers", "span"), [(1, 1), (2, 700), (3, None), (1, 5000)])
def test_workers_and_spans_are_irrelevant(workers, span, whole, tmp_path):
    spec, source, wanted = whole
    record = run(spec, source, tmp_path / "product", workers=workers, span_samples=span)
    assert record["memory"]["workers"] == workers
    assert bits(tmp_path / "product") == wanted


def test_a_budget_is_irrelevant(whole, tmp_path):
    spec, source, wanted = whole
    record = run(spec, source, tmp_path / "product", workers=3, budget_bytes=200 << 20)
    assert record["memory"]["workers"] == 1
    assert bits(tmp_path / "product") == wanted


def test_chunks_of_source_and_product_are_irrelevant(whole, tmp_path):
    _, source, _ = whole
    spec = spec_file(tmp_path, HUM.replace("ends: even", "ends: even, chunks: {time: 77}"))
    values = plate(6000, 3)
    values[2000:2010, 1] = np.nan
    other = store(tmp_path / "other.zarr", values, chunks=(123, 1))
    run(spec, other, tmp_path / "one")
    run(spec_file(tmp_path, HUM, "plain.yaml"), source, tmp_path / "two")
    for name in ("no_hum", "smooth"):
        one, two = smooth(tmp_path / "one", name), smooth(tmp_path / "two", name)
        assert one.tobytes() == two.tobytes()


SCRIPT = """\
import sys
from pipeline_filters.stage.running import run

print(run(*sys.argv[1:4], workers=2)["state"])
"""


@pytest.mark.parametrize("kind", ["bare", "from standard input"])
def test_run_in_a_script_with_worker_processes(kind, whole, tmp_path):
    spec, source, wanted = whole
    script = tmp_path / "script.py"
    script.write_text(SCRIPT)
    name, given = ("-", script.read_text()) if "input" in kind else (str(script), None)
    product = tmp_path / "product"
    said = subprocess.run(
        [sys.executable, "-W", "error", name, str(spec), str(source), str(product)],
        input=given,
        env={**os.environ, "PYTHONPATH": str(ROOT)},
        capture_output=True,
        text=True,
        timeout=60,
        check=False,
    )
    assert (said.returncode, said.stdout, said.stderr) == (0, "done\n", "")
    assert bits(product) == wanted


@pytest.fixture(scope="module")
def small(tmp_path_factory):
    """Spec, source and bits of something that takes few writes."""
    folder = tmp_path_factory.mktemp("small")
    spec = spec_file(folder, HUM)
    source = store(folder / "source.zarr", plate(300, 1), chunks=(150, 1))
    run(spec, source, folder / "product")
    return spec, source, bits(folder / "product")


def test_no_space_at_any_write(small, tmp_path, monkeypatch):
    spec, source, wanted = small
    write = os.write
    step, turn = 5, 0
    while True:
        left = step * turn + turn % step
        product = tmp_path / str(turn)

        def until(descriptor, data):
            nonlocal left
            left -= 1
            if left < 0:
                raise OSError(errno.ENOSPC, "No space left on device")
            return write(descriptor, data)

        with monkeypatch.context() as patch:
            patch.setattr("pipeline_filters.product.files.os.write", until)
            try:
                run(spec, source, product)
                break
            except SurroundingsError as error:
                said = str(error)
        assert "no space is left on the device" in said
        assert not list(product.rglob("*.partial"))
        run(spec, source, product)
        assert bits(product) == wanted, turn
        turn += 1
    assert turn > 8


def test_killed_at_any_write(small, tmp_path):
    spec, source, wanted = small
    script = Path(__file__).with_name("kill_at_each_write.py")
    said = subprocess.run(
        [sys.executable, script, spec, source, tmp_path, "7"],
        env={**os.environ, "PYTHONPATH": str(ROOT)},
        capture_output=True,
        text=True,
        timeout=100,
        check=False,
    )
    assert (said.returncode, said.stderr) == (0, "")
    products = sorted(tmp_path.iterdir())
    assert len(products) == int(said.stdout) + 1 > 6
    for product in products:
        assert bits(product) == wanted, product.name
        assert not list(product.rglob("*.partial")), product.name


def test_a_refusal_in_the_middle_keeps_what_is_done(tmp_path):
    values = plate(1000, 1)
    values[500] = np.nan
    spec = spec_file(tmp_path, changed() + "blocks: {hop: 1 sample}\n")
    source = store(tmp_path / "source.zarr", values, chunks=(100, 1))
    with pytest.raises(SourceError):
        run(spec, source, tmp_path / "product", span_samples=100)
    before = tree(source)
    values[500] = 1
    store(tmp_path / "source.zarr", values, chunks=(100, 1))
    assert tree(source) != before
    record = run(spec, source, tmp_path / "product", span_samples=100)
    assert record["results"]["smooth"]["spans_done_before"] > 0
    run(spec, source, tmp_path / "anew")
    assert bits(tmp_path / "product") == bits(tmp_path / "anew")


def test_progress_reaches_all_samples(tmp_path):
    spec, source = spec_file(tmp_path), store(tmp_path / "source.zarr")
    told: list[tuple[int, int]] = []
    run(spec, source, tmp_path / "product", progress=lambda *both: told.append(both))
    assert told[0] == (0, 2000)
    assert told[-1] == (2000, 2000)
    assert told == sorted(told)


def test_every_refusal_has_a_code_of_its_own():
    codes = {kind.__name__: kind.exit_code for kind in FilterStageError.__subclasses__()}
    assert codes["SurroundingsError"] == 8
    assert len(set(codes.values())) == len(codes)
    assert 1 not in codes.values()


def test_a_changed_result_is_another_one(tmp_path):
    source = store(tmp_path / "source.zarr")
    run(spec_file(tmp_path), source, tmp_path / "product")
    before = tree(tmp_path / "product")
    spec = spec_file(tmp_path, changed(("ends: hold", "ends: hold, keep_as: float64")), "w.yaml")
    with pytest.raises(FilterStageError, match="made by another spec"):
        run(spec, source, tmp_path / "product")
    assert tree(tmp_path / "product") == before
