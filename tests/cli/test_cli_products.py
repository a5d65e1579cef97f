"""Products that are refused stay byte for byte as they are; those that agree are gone on with."""

from __future__ import annotations

import errno
import os
import shutil
import sys

import pytest
from made_runs import (
    MEAN,
    START,
    begin,
    call,
    changed,
    ended,
    plate,
    refuses,
    spec_file,
    store,
    tree,
)

from pipeline_filters.product import files
from pipeline_filters.product.store import Product

REMEDY = "name another path, or take away by hand what lies there"
TWO = changed(
    (
        "ends: hold}",
        "ends: hold}\n  two: {from: plate, through: [mean], timing: aligned, ends: odd}",
    )
)


@pytest.fixture
def made(tmp_path, capsys):
    """A spec, a source and their product, and how they are called."""
    command = ["filter", spec_file(tmp_path), store(tmp_path / "source.zarr")]
    command += [tmp_path / "product", "--workers", 1]
    assert call(capsys, *command).code == 0
    return command


def test_again_there_is_nothing_to_do(made, tmp_path, capsys):
    before = tree(tmp_path)
    said = call(capsys, *made)
    assert (said.code, said.err) == (0, "")
    assert said.out == f"Nothing to do: {made[3]} holds every result of this spec and source.\n"
    told = call(capsys, *made, "--json")
    assert (told.code, told.record["state"]) == (0, "nothing to do")
    assert tree(tmp_path) == before


def test_another_specs_product(made, tmp_path, capsys):
    made[1] = spec_file(tmp_path, changed(("5 samples", "7 samples")), "seven.yaml")
    message = refuses(capsys, made, 5, tmp_path)
    assert message == (
        "~/product/smooth: result smooth was made by another spec: its digest is 72848c3804ae, "
        "the spec's d14f45956093; the spec that it was made by; give the result a new name in "
        "the spec, or name another product"
    )


def test_another_title_is_no_other_spec(made, tmp_path, capsys):
    made[1] = spec_file(tmp_path, changed(("Weir plate", "The same, renamed")), "renamed.yaml")
    said = call(capsys, *made)
    assert (said.code, said.err) == (0, "")
    assert said.out.startswith("Nothing to do")
    assert "renamed" in (made[3] / "zarr.json").read_text()


def test_one_more_result_leaves_the_first_alone(made, tmp_path, capsys):
    before = tree(made[3] / "smooth")
    made[1] = spec_file(tmp_path, TWO, "two.yaml")
    said = call(capsys, *made)
    assert (said.code, said.out.splitlines()[0]) == (0, "smooth: was done before")
    assert tree(made[3] / "smooth") == before
    # A spec that does not name a result leaves it there.
    made[1] = spec_file(tmp_path)
    assert call(capsys, *made).code == 0
    assert (made[3] / "two" / "two" / "zarr.json").exists()


def test_a_second_result_that_is_refused_harms_neither(made, tmp_path, capsys):
    made[1] = spec_file(tmp_path, TWO.replace("timing: aligned", "timing: late"), "late.yaml")
    assert "timing: late" in refuses(capsys, made, 3, tmp_path)


# what was made from 1000 samples of 2 geophones, with another source
OTHERS = {
    "grown": (
        (1500, 2),
        "~/product: the source has grown since this product was made: plate.shape was [1000, 2], "
        "is [1500, 2]; plate.stamps_ns was [1772323200000000000, 1772323200999000000], is "
        "[1772323200000000000, 1772323201499000000]; increments are not taken yet; name a new "
        "product for the longer source, or filter the source as it was",
    ),
    "shorter": (
        (500, 2),
        "~/product: the product was made from another source: plate.shape was [1000, 2], is "
        "[500, 2]; plate.stamps_ns was [1772323200000000000, 1772323200999000000], is "
        "[1772323200000000000, 1772323200499000000]; the source that it was made from; name "
        "another product for this source",
    ),
    "one geophone more": (
        (1000, 3),
        "~/product: the product was made from another source: plate.shape was [1000, 2], is "
        "[1000, 3]; the source that it was made from; name another product for this source",
    ),
}


@pytest.mark.parametrize("name", OTHERS)
def test_another_source(name, made, tmp_path, capsys):
    shape, message = OTHERS[name]
    made[2] = store(tmp_path / "other.zarr", plate(*shape))
    assert refuses(capsys, made, 5, tmp_path) == message


def test_a_source_that_was_moved_is_the_same(made, tmp_path, capsys):
    before = tree(made[3])
    made[2] = shutil.move(made[2], tmp_path / "moved.zarr")
    assert call(capsys, *made).out.startswith("Nothing to do")
    assert tree(made[3]) == before


def test_foreign_places(made, tmp_path, capsys):
    (tmp_path / "notes").mkdir()
    (tmp_path / "notes" / "notes.txt").write_text("mine")
    other = store(tmp_path / "other.zarr")
    allowed = f"an empty place or a product of this program; {REMEDY}"
    apart = "source and product are two separate stores; name another path"
    source = made[2]
    for place, code, message in (
        ("notes", 5, f"~/notes: something that is not a product lies there; {allowed}"),
        ("notes/notes.txt", 5, f"~/notes/notes.txt: a file lies there, not a product; {allowed}"),
        ("other.zarr", 5, f"~/other.zarr: a Zarr store of another program lies there; {allowed}"),
        ("source.zarr", 4, f"~/source.zarr: the product's path is the source's; {apart}"),
        ("", 4, f"~: the source ~/source.zarr lies inside the product; {apart}"),
        (
            "source.zarr/in",
            4,
            "~/source.zarr/in: the product lies inside the source ~/source.zarr; source and "
            "product are two separate stores; name another path",
        ),
        (
            "source.zarr/velocity/in",
            4,
            "~/source.zarr/velocity/in: the product lies inside the source ~/source.zarr; source "
            "and product are two separate stores; name another path",
        ),
    ):
        made[3] = tmp_path / place
        assert refuses(capsys, made, code, tmp_path) == message
    assert other.exists()
    assert source.exists()


def test_a_product_as_its_own_source(made, tmp_path, capsys):
    made[1] = spec_file(tmp_path, changed(("velocity", "smooth")), "again.yaml")
    made[2] = made[3] / "smooth"
    assert refuses(capsys, made, 4, tmp_path) == (
        "~/product: the product's path is the source's; source and product are two separate "
        "stores; name another path"
    )


DAMAGES = {
    "zarr.json": "~/product/zarr.json: is damaged: not JSON",
    "smooth/zarr.json": "~/product/smooth: result smooth is damaged: Expecting property name "
    "enclosed in double quotes: line 1 column 2 (char 1)",
    "smooth/time/zarr.json": "~/product/smooth: result smooth is damaged: Expecting property name "
    "enclosed in double quotes: line 1 column 2 (char 1)",
    "register/smooth/zarr.json": "~/product/smooth: result smooth is damaged: Expecting property "
    "name enclosed in double quotes: line 1 column 2 (char 1)",
}


@pytest.mark.parametrize("name", DAMAGES)
def test_a_damaged_product(name, made, tmp_path, capsys):
    file = made[3] / name
    file.write_text("{junk")
    assert refuses(capsys, made, 5, tmp_path) == f"{DAMAGES[name]}; a whole product; {REMEDY}"
    file.unlink()
    gone = refuses(capsys, made, 5, tmp_path)
    assert "not a product" in gone or "No such file" in gone


def test_damaged_coefficients(made, tmp_path, capsys):
    chunk = next((made[3] / "coefficients" / "smooth").glob("*/c/0"))
    chunk.write_bytes(b"junk")
    message = refuses(capsys, made, 5, tmp_path)
    assert message == (
        "~/product/coefficients/smooth: the coefficients of result smooth cannot be read: Zstd "
        "decompression error: invalid input data; a whole product; take the product away by "
        "hand, or name another path, and run again"
    )


HOLD = """
import sys
from pipeline_filters.product.store import Product
state = Product.inspect(sys.argv[1])
with Product(__import__("pathlib").Path(sys.argv[1]), state.results, {}).hold():
    print("held", flush=True)
    sys.stdin.read()
"""


def test_a_product_that_another_run_holds(made, tmp_path, capsys):
    holder = begin(made[3], start=HOLD, stdin=-1)
    assert holder.stdout.readline() == "held\n"
    # Nothing is to be done: nothing is to be held.
    assert call(capsys, *made).code == 0
    made[1] = spec_file(tmp_path, TWO, "two.yaml")
    message = refuses(capsys, made, 7, tmp_path)
    assert message == (
        f"~/product: process {holder.pid} on {os.uname().nodename} is writing this product; one "
        "run at a time; wait until it has ended, then run again"
    )
    assert ended(holder).code == 0
    assert call(capsys, *made).code == 0


def test_targets_that_the_system_refuses(made, tmp_path, capsys):
    (tmp_path / "file").write_text("")
    made[3] = tmp_path / "file" / "product"
    assert refuses(capsys, made, 8, tmp_path) == (
        "~/file/product: the product cannot be written: a part of the path is a file; name a "
        "target whose parents are folders"
    )
    made[3] = tmp_path / ("n" * 300)
    assert refuses(capsys, made, 8, tmp_path).endswith(
        "the path is too long; name a shorter target"
    )
    if sys.platform == "linux":
        made[3] = "/proc/product"
        assert refuses(capsys, made, 8, tmp_path) == (
            "/proc/product: the product cannot be written: No such file or directory; put this "
            "right, then run again"
        )


SAYS = {
    errno.ENOSPC: "no space is left on the device; free some space there, then run again",
    errno.EROFS: "the file system is read-only; name a target on one that can be written",
    errno.EACCES: "access is denied; have the right to write there given, then run again",
    errno.EIO: "Input/output error; put this right, then run again",
}


@pytest.mark.parametrize("number", SAYS)
def test_a_target_that_refuses_in_the_middle(number, made, tmp_path, capsys, monkeypatch):
    finished = tree(made[3] / "smooth")
    made[1] = spec_file(tmp_path, TWO, "two.yaml")

    def refused(path, data, write=files.write_file):
        if "/two/two/c/1/" in str(path):
            raise OSError(number, os.strerror(number))
        write(path, data)

    with monkeypatch.context() as patch:
        patch.setattr("pipeline_filters.product.chunk_files.write_file", refused)
        said = call(capsys, *made, "--json")
    assert said.code == said.record["exit_code"] == 8
    assert said.err == f"{made[3]}: the product cannot be written: {SAYS[number]}\n"
    assert tree(made[3] / "smooth") == finished
    assert call(capsys, *made).code == 0
    assert tree(made[3] / "smooth") == finished


def test_a_limit_of_file_sizes_in_worker_processes(tmp_path, capsys):
    # What the system refuses in a worker is told as what it refuses here.
    source = store(tmp_path / "source.zarr", plate(40_000), chunks=(20_000, 1))
    limit = "import resource; resource.setrlimit(resource.RLIMIT_FSIZE, (40_000, 40_000)); "
    product = tmp_path / "product"
    command = ["filter", spec_file(tmp_path, MEAN), source, product, "--workers", 2]
    said = ended(begin(*command, start=limit + START))
    assert (said.code, said.out) == (8, "")
    assert said.err == (
        f"{product}: the product cannot be written: File too large; put this right, then run "
        "again\n"
    )
    assert not list(product.rglob("*.partial"))
    assert call(capsys, *command[:-1], 1).code == 0
    assert Product.inspect(product).results["smooth"].state == "ended"


def test_a_product_whose_name_the_terminal_cannot_show(tmp_path):
    product = os.fsdecode(os.fsencode(tmp_path) + b"/pr\xff")
    command = ["filter", spec_file(tmp_path), store(tmp_path / "source.zarr"), product]
    assert ended(begin(*command, "--workers", 1)).code == 0
    said = ended(begin(*command, "--workers", 1))
    assert (said.code, said.err) == (0, "")
    assert "pr\\udcff holds every result" in said.out
