"""One run at a time, and a lock that dies with its process."""

from __future__ import annotations

import os
import signal
import subprocess
import sys

import numpy as np
import pytest
from made_products import fill, plan, prepare, tree_digest

from pipeline_filters.errors import HeldError, ProductError
from pipeline_filters.product import inspection
from pipeline_filters.product.creation import create_root

HOLDER = """
import sys
from pathlib import Path
sys.path.insert(0, sys.argv[1])
from made_products import prepare
with prepare(Path(sys.argv[2])).hold():
    print("held", flush=True)
    sys.stdin.read()
"""


@pytest.fixture
def holder(tmp_path):
    """Another process that holds the product at tmp_path/p."""
    folder = os.path.dirname(__file__)
    with subprocess.Popen(
        [sys.executable, "-c", HOLDER, folder, str(tmp_path / "p")],
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        text=True,
    ) as process:
        assert process.stdout.readline() == "held\n"
        yield process
        process.kill()


def test_another_process_is_kept_out_until_it_ends(tmp_path, holder):
    path = tmp_path / "p"
    product = prepare(path)
    before = tree_digest(path)
    with pytest.raises(HeldError, match=f"process {holder.pid} on ") as caught, product.hold():
        pass
    assert caught.value.exit_code == 7
    assert "wait until it has ended" in str(caught.value)
    with pytest.raises(HeldError):
        prepare(path, plan("still_band"))
    assert tree_digest(path) == before
    holder.stdin.close()
    holder.wait()
    with product.hold():
        pass


def test_a_killed_process_holds_nothing(tmp_path, holder):
    holder.send_signal(signal.SIGKILL)
    holder.wait()
    with prepare(tmp_path / "p").hold():
        pass


def test_a_worker_that_outlives_a_killed_run_holds_nothing(tmp_path):
    product = prepare(tmp_path / "p")
    read, write = os.pipe()
    run = os.fork()
    if run == 0:
        with product.hold():
            worker = os.fork()
            if worker == 0:
                signal.pause()
            os.write(write, f"{worker}\n".encode())
            os.kill(os.getpid(), signal.SIGKILL)
    worker = int(os.read(read, 20))
    os.waitpid(run, 0)
    try:
        with product.hold():
            pass
    finally:
        os.kill(worker, signal.SIGKILL)
        os.close(read)
        os.close(write)


def test_a_second_run_in_the_same_process_is_kept_out(tmp_path):
    one, two = prepare(tmp_path / "p"), prepare(tmp_path / "p")
    with one.hold():
        with pytest.raises(HeldError, match="this process"), two.hold():
            pass
        # The attempt must not have dropped the lock that the process holds.
        assert locked_for_others(tmp_path / "p")
    with two.hold():
        pass


def test_a_lock_taken_in_vain_is_free_again(tmp_path):
    product = prepare(tmp_path / "p")
    with pytest.raises(ZeroDivisionError), product.hold():
        raise ZeroDivisionError
    with product.hold():
        pass


def test_a_result_that_came_meanwhile_is_seen(tmp_path, monkeypatch):
    # Another run makes the product between the look at it and the lock.
    path = tmp_path / "p"
    looks = []
    look = inspection.inspect

    def looking(where):
        found = look(where)
        looks.append(found.kind)
        if len(looks) == 1:
            monkeypatch.undo()
            fill(prepare(path), "gravel_band", np.ones((250, 3), np.float32))
        return found

    monkeypatch.setattr("pipeline_filters.product.inspection.inspect", looking)
    product = prepare(path, plan(), plan("still_band"))
    assert looks == ["absent"]
    assert sorted(product.results) == ["gravel_band", "still_band"]
    assert product.register("gravel_band").done().all()


def test_another_spec_that_came_meanwhile_is_refused(tmp_path, monkeypatch):
    path = tmp_path / "p"
    look = inspection.inspect

    def looking(where):
        found = look(where)
        monkeypatch.undo()
        prepare(path, plan(digest="f" * 64))
        before.update(tree_digest(path))
        return found

    before: dict[str, str] = {}
    monkeypatch.setattr("pipeline_filters.product.inspection.inspect", looking)
    with pytest.raises(ProductError, match="another spec"):
        prepare(path)
    after = tree_digest(path)
    # Only the lock's file, which says who has held it last, has been written meanwhile.
    del before["register/.lock/held"], after["register/.lock/held"]
    assert after == before


def test_a_run_that_makes_the_product_keeps_others_out(tmp_path, monkeypatch):
    path = tmp_path / "p"

    def meanwhile(root):
        with pytest.raises(HeldError):
            prepare(path)
        create_root(root)

    monkeypatch.setattr("pipeline_filters.product.store.create_root", meanwhile)
    assert list(prepare(path).results) == ["gravel_band"]


def locked_for_others(path) -> bool:
    code = f"import fcntl; fcntl.lockf(open({str(path / 'register/.lock/held')!r}, 'r+'), 6)"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, check=False)
    return done.returncode != 0
