"""Refusals: each names the place and a remedy, and leaves every byte as it was."""

from __future__ import annotations

import errno
import json
import os

import numpy as np
import pytest
import zarr
from made_products import IDENTITY, plan, prepare, tree_digest
from zarr.storage import LocalStore

from pipeline_filters.errors import (
    CommandLineError,
    ProductError,
    SourceError,
    SpecError,
    SurroundingsError,
)
from pipeline_filters.product import files
from pipeline_filters.product.store import Product


def refused(path, error, *plans, **changes):
    before = tree_digest(path) if path.is_dir() else None
    with pytest.raises(error) as caught:
        prepare(path, *plans, **changes)
    if before is not None:
        assert tree_digest(path) == before
    for problem in caught.value.problems:
        assert problem.where
        assert problem.found
        assert problem.remedy
    return str(caught.value)


def test_another_spec_under_a_results_name(tmp_path):
    prepare(tmp_path / "p", plan(), plan("still_band"))
    text = refused(
        tmp_path / "p",
        ProductError,
        plan(digest="f" * 64),
        plan("new_band"),
        plan("still_band", digest="e" * 64),
    )
    assert "gravel_band" in text
    assert "still_band" in text
    assert "ffffffffffff" in text
    assert "new_band" not in text


def test_another_source(tmp_path):
    prepare(tmp_path / "p")
    other = {"plate": {**IDENTITY["plate"], "variable": "acceleration"}}
    text = refused(tmp_path / "p", ProductError, source_identity=other)
    assert "plate.variable was velocity, is acceleration" in text


def test_a_source_that_has_grown(tmp_path):
    prepare(tmp_path / "p")
    other = {"plate": {"variable": "velocity", "shape": [300, 3], "stamps_ns": [0, 299]}}
    text = refused(tmp_path / "p", ProductError, plan(shape=(300, 3)), source_identity=other)
    assert "has grown" in text
    assert "increments are not taken yet" in text
    assert len(text.splitlines()) == 1


@pytest.mark.parametrize(
    "changes",
    [
        {"shape": [200, 3]},
        {"shape": [250, 4]},
        {"stamps_ns": [5, 254]},
        {"shape": [300, 3], "stamps_ns": [5, 304]},
        {"shape": [300, 3], "stamps_ns": None},
        {"shape": [300, 2], "stamps_ns": [0, 299]},
        {"shape": [300, 3], "stamps_ns": [0, 299], "variable": "pressure"},
    ],
)
def test_a_source_that_has_not_only_grown(tmp_path, changes):
    prepare(tmp_path / "p")
    other = {"plate": {**IDENTITY["plate"], **changes}}
    text = refused(tmp_path / "p", ProductError, source_identity=other)
    assert "another source" in text
    assert "has grown" not in text


def test_a_source_without_stamps_that_has_grown(tmp_path):
    one = {"plate": {"shape": [250, 3], "stamps_ns": None}}
    prepare(tmp_path / "p", source_identity=one)
    two = {"plate": {"shape": [300, 3], "stamps_ns": None}}
    assert "has grown" in refused(tmp_path / "p", ProductError, source_identity=two)


def test_another_form(tmp_path):
    prepare(tmp_path / "p")
    text = refused(tmp_path / "p", ProductError, plan(dtype="float64"))
    assert "float32 (time 250, geophone 3), stamped" in text


def store_of_another(path):
    zarr.create_group(str(path), attributes={"title": "someone's"})


def store_of_old_zarr(path):
    zarr.create_array(str(path), shape=(3,), dtype="f4", zarr_format=2)


def folder_of_files(path):
    path.mkdir()
    (path / "notes.txt").write_text("x")


def folder_with_a_lock(path):
    (path / "register/.lock").mkdir(parents=True)
    (path / "register/.lock/held").write_text("")
    (path / "register/others.dat").write_text("x")


def later_format(path):
    prepare(path)
    node = json.loads((path / "zarr.json").read_text())
    node["attributes"]["pipeline_filters"]["format"] = 99
    (path / "zarr.json").write_text(json.dumps(node))


def no_json(path):
    prepare(path)
    (path / "zarr.json").write_text("{")


def lost_attributes(path):
    prepare(path)
    node = json.loads((path / "zarr.json").read_text())
    del node["attributes"]["pipeline_filters"]["source"]
    (path / "zarr.json").write_text(json.dumps(node))


def lost_array(path):
    prepare(path)
    (path / "gravel_band/gravel_band/zarr.json").unlink()


def lost_register(path):
    prepare(path)
    (path / "register/gravel_band/state/zarr.json").unlink()


def swapped_group(path):
    prepare(path)
    node = json.loads((path / "gravel_band/zarr.json").read_text())
    node["attributes"]["pipeline_filters"]["digest"] = "0" * 64
    (path / "gravel_band/zarr.json").write_text(json.dumps(node))


def strange_state(path):
    prepare(path)
    node = json.loads((path / "gravel_band/zarr.json").read_text())
    node["attributes"]["state"] = "asleep"
    (path / "gravel_band/zarr.json").write_text(json.dumps(node))


def strange_folder(path):
    prepare(path, plan("other"))
    folder_of_files(path / "gravel_band")


@pytest.mark.parametrize(
    ("lay", "words"),
    [
        (store_of_another, "Zarr store of another program"),
        (store_of_old_zarr, "not a product"),
        (folder_of_files, "not a product"),
        (folder_with_a_lock, "not a product"),
        (later_format, "format 99"),
        (no_json, "not JSON"),
        (lost_attributes, "not whole"),
        (lost_array, "gravel_band is damaged"),
        (lost_register, "gravel_band is damaged"),
        (swapped_group, "gravel_band is damaged"),
        (strange_state, "asleep"),
        (strange_folder, "not of this product"),
    ],
)
def test_what_is_not_ours_or_damaged(tmp_path, lay, words):
    path = tmp_path / "p"
    lay(path)
    assert words in refused(path, ProductError)


def test_a_file_at_the_path(tmp_path):
    (tmp_path / "p").write_text("x")
    assert "a file lies there" in refused(tmp_path / "p", ProductError)
    assert (tmp_path / "p").read_text() == "x"


def test_an_empty_folder_is_taken(tmp_path):
    (tmp_path / "p").mkdir()
    prepare(tmp_path / "p")
    assert Product.inspect(tmp_path / "p").kind == "ours"


def test_inspecting_never_writes(tmp_path):
    assert Product.inspect(tmp_path / "no/such").kind == "absent"
    assert not (tmp_path / "no").exists()
    prepare(tmp_path / "p")
    before = tree_digest(tmp_path / "p")
    Product.inspect(tmp_path / "p")
    assert tree_digest(tmp_path / "p") == before


@pytest.mark.parametrize(
    ("product", "source"),
    [
        ("a.zarr", "a.zarr"),
        ("a.zarr/out", "a.zarr"),
        ("a.zarr/out", "a.zarr/raw"),
        (".", "a.zarr"),
        ("a.zarr/raw/../out", "a.zarr/raw"),
        ("link/out", "a.zarr"),
    ],
)
def test_a_product_in_its_source_or_around_it(tmp_path, product, source):
    zarr.create_group(str(tmp_path / "a.zarr")).create_group("raw")
    (tmp_path / "link").symlink_to(tmp_path / "a.zarr")
    before = tree_digest(tmp_path)
    with pytest.raises(SourceError, match="two separate stores"):
        prepare(tmp_path / product, source_path=tmp_path / source)
    assert tree_digest(tmp_path) == before


def test_a_product_beside_its_source(tmp_path):
    zarr.create_group(str(tmp_path / "a.zarr"))
    prepare(tmp_path / "a.zarr.out", source_path=tmp_path / "a.zarr")


@pytest.mark.parametrize("name", ["time", "geophone", "register", "coefficients", ".lock", "a/b"])
def test_result_names_that_the_store_needs(tmp_path, name):
    with pytest.raises(SpecError, match="rename the result"):
        prepare(tmp_path / "p", plan(name))
    assert not (tmp_path / "p").exists()


def test_an_address_is_not_a_path(tmp_path):
    with pytest.raises(CommandLineError, match="local path"):
        prepare("s3://bucket/p")


def write_chunk(product):
    product.writer("gravel_band").write(0, 60, (slice(0, 2),), np.zeros((60, 2), np.float32))


def write_register(product):
    register = product.register("gravel_band")
    register.mark([((0, 0), b"i" * 16, b"o" * 16)])
    register.flush()


def take_hold(product):
    with product.hold():
        pass


def end(product):
    product.end("gravel_band", 0, {})


SYSTEM_REFUSALS = [
    (errno.ENOSPC, "no space is left"),
    (errno.EDQUOT, "quota"),
    (errno.EACCES, "access is denied"),
    (errno.EROFS, "read-only"),
    (errno.EIO, os.strerror(errno.EIO)),
]


def has_failing(monkeypatch, target, name, number):
    def fail(*args, **kwargs):
        raise OSError(number, os.strerror(number))

    monkeypatch.setattr(target, name, fail)


@pytest.mark.parametrize(("number", "words"), SYSTEM_REFUSALS)
@pytest.mark.parametrize(("target", "name"), [(os, "mkdir"), (os, "open"), (os, "replace")])
def test_what_the_system_refuses_while_making(tmp_path, monkeypatch, number, words, target, name):
    has_failing(monkeypatch, target, name, number)
    with pytest.raises(SurroundingsError, match=words) as caught:
        prepare(tmp_path / "p")
    assert caught.value.exit_code == 8
    assert str(tmp_path / "p") in str(caught.value)
    monkeypatch.undo()
    prepare(tmp_path / "p")


@pytest.mark.parametrize(("number", "words"), SYSTEM_REFUSALS)
@pytest.mark.parametrize(
    ("action", "target", "name"),
    [
        (write_chunk, os, "open"),
        (write_chunk, os, "write"),
        (write_chunk, os, "replace"),
        (write_register, os, "write"),
        (write_register, os, "open"),
        (take_hold, os, "open"),
        (end, os, "write"),
    ],
)
def test_what_the_system_refuses_later(tmp_path, monkeypatch, number, words, action, target, name):
    product = prepare(tmp_path / "p")
    before = tree_digest(tmp_path / "p")
    has_failing(monkeypatch, target, name, number)
    with pytest.raises(SurroundingsError, match=words) as caught:
        action(product)
    assert str(tmp_path / "p") in str(caught.value)
    monkeypatch.undo()
    assert tree_digest(tmp_path / "p") == before
    action(product)


def test_what_the_system_refuses_to_a_sharded_store(tmp_path, monkeypatch):
    async def fail(self, key, value):
        raise OSError(errno.ENOSPC, "No space left on device")

    writer = prepare(tmp_path / "p", plan(chunks=(20, 1), shards=(60, 2))).writer("gravel_band")
    assert writer.form is None
    monkeypatch.setattr(LocalStore, "set", fail)
    with pytest.raises(SurroundingsError, match="no space"):
        writer.write(0, 60, (slice(0, 2),), np.zeros((60, 2), np.float32))


def test_a_register_that_cannot_be_flushed_keeps_its_marks(tmp_path, monkeypatch):
    register = prepare(tmp_path / "p").register("gravel_band")
    register.mark([((0, 0), b"i" * 16, b"o" * 16)])
    with monkeypatch.context() as patch:
        has_failing(patch, os, "write", errno.ENOSPC)
        with pytest.raises(SurroundingsError, match="no space"):
            register.flush()
    register.flush()
    assert prepare(tmp_path / "p").register("gravel_band").done().sum() == 1


def test_a_chunk_that_cannot_be_written_leaves_the_one_before(tmp_path, monkeypatch):
    path = tmp_path / "p"
    writer = prepare(path).writer("gravel_band")
    writer.write(0, 60, (slice(0, 2),), np.ones((60, 2), np.float32))
    before = tree_digest(path)

    def short_of_space(descriptor, data):
        raise OSError(errno.ENOSPC, "No space left on device")

    monkeypatch.setattr(files.os, "write", short_of_space)
    with pytest.raises(SurroundingsError, match="no space"):
        writer.write(0, 60, (slice(0, 2),), np.zeros((60, 2), np.float32))
    assert tree_digest(path) == before


def test_a_parent_that_is_a_file(tmp_path):
    (tmp_path / "file").write_text("x")
    with pytest.raises(SurroundingsError, match="a part of the path is a file"):
        prepare(tmp_path / "file" / "p")
