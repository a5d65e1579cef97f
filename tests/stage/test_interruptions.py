"""Stopped, killed, and run again: the same bits as a run that nothing stopped."""

from __future__ import annotations

import os
import random
import signal
import time

import pytest
from made_runs import HUM, bits, call, ended, plate, spec_file, store
from stopped_runs import begin_slowly, units_done, wait_for, wait_for_none, workers_of

from pipeline_filters.stage.running import run

# Two results of 20 x 2 units.
UNITS = 80


@pytest.fixture(scope="module")
def whole(tmp_path_factory):
    """Spec, source, and the bits of a run that nothing stopped."""
    folder = tmp_path_factory.mktemp("whole")
    spec = spec_file(folder, HUM)
    source = store(folder / "source.zarr", plate(20_000), chunks=(1000, 1))
    run(spec, source, folder / "product")
    return spec, source, bits(folder / "product")


STOPPED = "{product}: stopped early; run again to continue\n"


@pytest.mark.parametrize(
    ("number", "workers"),
    [(signal.SIGINT, 1), (signal.SIGINT, 2), (signal.SIGTERM, 1), (signal.SIGTERM, 2)],
)
def test_a_stop_is_told_and_gone_on_from(number, workers, whole, tmp_path, capsys, monkeypatch):
    spec, source, wanted = whole
    product = tmp_path / "product"
    command = ["filter", spec, source, product, "--json"]
    process = begin_slowly([*command, "--workers", workers])
    wait_for(process, product, 5)
    if number == signal.SIGINT:  # as from a terminal: to all processes
        os.killpg(process.pid, number)
    else:
        process.send_signal(number)
    said = ended(process)
    assert (said.code, said.err) == (75, STOPPED.format(product=product))
    assert said.record["problems"][0]["found"] == "stopped early"
    wait_for_none(process.pid)
    done = units_done(product)
    assert 5 <= done < UNITS
    # Cut as they were; the test of kills cuts them otherwise.
    monkeypatch.setattr("pipeline_filters.stage.compiling.SPAN_SAMPLES", 2000)
    again = call(capsys, *command, "--workers", 1)
    assert again.code == 0
    assert bits(product) == wanted
    before = [one["spans_done_before"] for one in again.record["results"].values()]
    assert sum(before) > 0
    assert call(capsys, *command).record["state"] == "nothing to do"


def test_killed_again_and_again(whole, tmp_path, capsys):
    spec, source, wanted = whole
    product = tmp_path / "product"
    command = ["filter", spec, source, product, "--workers"]
    for units, workers in ((5, 1), (25, 2), (50, 1)):
        process = begin_slowly([*command, workers])
        wait_for(process, product, units)
        process.kill()
        assert ended(process).code == -signal.SIGKILL
        wait_for_none(process.pid)
        assert units <= units_done(product) < UNITS
    assert call(capsys, *command, 1).code == 0
    assert bits(product) == wanted
    assert not list(product.rglob("*.partial"))


def test_a_worker_that_is_killed(whole, tmp_path, capsys):
    spec, source, wanted = whole
    product = tmp_path / "product"
    command = ["filter", spec, source, product, "--workers"]
    process = begin_slowly([*command, 2])
    wait_for(process, product, 5)
    os.kill(workers_of(process.pid)[0], signal.SIGKILL)
    said = ended(process)
    assert (said.code, said.out) == (75, "")
    assert said.err == (
        "a worker process: it was ended from outside (often: out of memory); run again; with a "
        "lower --memory or fewer --workers if it happens again\n"
    )
    wait_for_none(process.pid)
    assert 5 <= units_done(product) < UNITS
    assert call(capsys, *command, 1).code == 0
    assert bits(product) == wanted


@pytest.mark.soak
def test_twenty_random_ends(whole, tmp_path, capsys):
    spec, source, wanted = whole
    chance = random.Random(20)
    stopped = 0
    for turn in range(20):
        product = tmp_path / f"product-{turn // 4}"
        command = ["filter", spec, source, product, "--workers"]
        process = begin_slowly([*command, chance.randint(1, 3)], pause=0.02)
        time.sleep(chance.uniform(0.05, 2.5))
        kind = chance.choice(["kill", "group", "interrupt", "terminate", "worker"])
        workers = workers_of(process.pid)
        if kind == "kill":
            process.kill()
        elif kind == "group":
            os.killpg(process.pid, signal.SIGKILL)
        elif kind == "interrupt":
            os.killpg(process.pid, signal.SIGINT)
        elif kind == "terminate" or not workers:
            process.terminate()
        else:
            os.kill(chance.choice(workers), signal.SIGKILL)
        said = ended(process)
        wait_for_none(process.pid)
        assert said.code in (0, 75, -signal.SIGKILL, -signal.SIGTERM, -signal.SIGINT), said
        stopped += said.code != 0
        if said.code in (0, 75):
            assert "Traceback" not in said.err, (kind, said.err)
        if turn % 4 == 3:
            assert call(capsys, *command, 1).code == 0
            assert bits(product) == wanted
    assert stopped >= 10
