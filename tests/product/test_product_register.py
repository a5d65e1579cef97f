"""The register: what is done survives, and nothing else is said to be."""

from __future__ import annotations

import json

import numpy as np
import pytest
import zarr
from hypothesis import given, settings
from hypothesis import strategies as st
from made_products import SURROUNDINGS, plan, prepare

from pipeline_filters.errors import ProductError
from pipeline_filters.product import chunk_files
from pipeline_filters.product.nodes import copy_is_fresh
from pipeline_filters.product.register import CHUNK_UNITS, grid_chunks

OTHER = {**SURROUNDINGS, "versions": {"numpy": "9.0"}}


def unit(*place, given=b"i", made=b"o"):
    return place, given * 16, made * 16


def test_marks_count_at_once_and_last_once_flushed(tmp_path):
    register = prepare(tmp_path / "p").register("gravel_band")
    assert register.grid == (5, 2)
    register.mark([unit(0, 0), unit(4, 1, given=b"x", made=b"y")])
    expected = np.zeros((5, 2), bool)
    expected[0, 0] = expected[4, 1] = True
    np.testing.assert_array_equal(register.done(), expected)
    assert not prepare(tmp_path / "p").register("gravel_band").done().any()
    register.flush()
    again = prepare(tmp_path / "p").register("gravel_band")
    np.testing.assert_array_equal(again.done(), expected)
    assert again.digests((4, 1)) == (b"x" * 16, b"y" * 16)
    assert again.digests((1, 1)) == (bytes(16), bytes(16))


def test_a_unit_may_be_marked_anew(tmp_path):
    register = prepare(tmp_path / "p").register("gravel_band")
    register.mark([unit(4, 0)])
    register.flush()
    register.mark([unit(4, 0, made=b"z")])
    register.flush()
    assert prepare(tmp_path / "p").register("gravel_band").digests((4, 0))[1] == b"z" * 16


def test_no_unit_is_done_before_all_else_about_it_is_stored(tmp_path, monkeypatch):
    # A crash after each write of a flush: state comes last.
    class CrashError(Exception):
        pass

    write_file, steps = chunk_files.write_file, 0
    for step in range(1, 10):
        path = tmp_path / f"p{step}"
        register = prepare(path).register("gravel_band")
        register.mark([unit(place, 0) for place in range(5)])
        left = iter(range(step - 1, -1, -1))

        def failing(name, data, left=left):
            if next(left) == 0:
                raise CrashError
            write_file(name, data)

        crashed = False
        with monkeypatch.context() as patch:
            patch.setattr(chunk_files, "write_file", failing)
            try:
                register.flush()
            except CrashError:
                crashed = True
        steps += crashed
        again = prepare(path).register("gravel_band")
        assert again.done().any() != crashed
        for place in np.argwhere(again.done()):
            assert again.digests(tuple(place)) == (b"i" * 16, b"o" * 16)
    assert steps == 4


@settings(deadline=None, max_examples=25)
@given(data=st.data())
def test_any_order_of_marks_and_flushes(tmp_path_factory, data):
    monkeypatch = pytest.MonkeyPatch()
    monkeypatch.setattr("pipeline_filters.product.register.CHUNK_UNITS", 6)
    path = tmp_path_factory.mktemp("any") / "p"
    made = plan(shape=(50, 7), chunks=(3, 2))
    register = prepare(path, made).register("gravel_band")
    monkeypatch.undo()
    expected = np.zeros(register.grid, bool)
    places = st.tuples(*(st.integers(0, n - 1) for n in register.grid))
    for batch in data.draw(st.lists(st.lists(places, max_size=20), max_size=6)):
        register.mark([(place, bytes([*place] * 8), bytes(16)) for place in batch])
        for place in batch:
            expected[place] = True
        action = data.draw(st.sampled_from(["flush", "open", "none"]))
        if action != "none":
            register.flush()
        if action == "open":
            register = prepare(path, made).register("gravel_band")
        np.testing.assert_array_equal(register.done(), expected)
    register.flush()
    again = prepare(path, made).register("gravel_band")
    np.testing.assert_array_equal(again.done(), expected)
    for place in np.argwhere(expected):
        assert again.digests(tuple(place))[0] == bytes([*place] * 8)


@pytest.mark.parametrize(
    "bad", [unit(5, 0), unit(0, 2), unit(-1, 0), unit(0), ((0, 0), b"", b"o" * 16)]
)
def test_what_is_no_unit_is_refused(tmp_path, bad):
    register = prepare(tmp_path / "p").register("gravel_band")
    with pytest.raises(ValueError, match=r"outside the grid|16 bytes"):
        register.mark([bad])
    assert not register.done().any()


def test_a_mixture_of_surroundings_is_told(tmp_path):
    path = tmp_path / "p"
    one = prepare(path).register("gravel_band")
    one.mark([unit(place, 0) for place in range(3)])
    one.flush()
    assert copy_is_fresh(path)
    assert one.mixture() == [{"units": 3, "surroundings": SURROUNDINGS}]
    two = prepare(path, surroundings=OTHER).register("gravel_band")
    two.mark([unit(place, 1) for place in range(5)])
    expected = [
        {"units": 5, "surroundings": OTHER},
        {"units": 3, "surroundings": SURROUNDINGS},
    ]
    assert two.mixture() == expected
    two.flush()
    three = prepare(path).register("gravel_band")
    assert three.mixture() == expected
    three.mark([unit(4, 0)])
    known = json.loads((path / "register/gravel_band/zarr.json").read_text())["attributes"]
    assert known["surroundings"] == [SURROUNDINGS, OTHER]


def test_preparing_under_other_surroundings_changes_nothing(tmp_path):
    prepare(tmp_path / "p")
    before = (tmp_path / "p/zarr.json").read_bytes()
    prepare(tmp_path / "p", surroundings=OTHER)
    assert (tmp_path / "p/zarr.json").read_bytes() == before


def test_a_register_that_is_cut_short_is_refused(tmp_path):
    path = tmp_path / "p"
    register = prepare(path).register("gravel_band")
    register.mark([unit(0, 0)])
    register.flush()
    file = path / "register/gravel_band/state/c/0/0"
    file.write_bytes(file.read_bytes()[:5])
    with pytest.raises(ProductError, match="register of result gravel_band cannot be read"):
        prepare(path).register("gravel_band").done()


def test_a_register_of_another_form_is_refused(tmp_path):
    path = tmp_path / "p"
    prepare(path)
    file = path / "register/gravel_band/state/zarr.json"
    file.write_text(
        file.read_text().replace('"zstd"', '"gzip"').replace('"checksum": false', '"level": 1')
    )
    with pytest.raises(ProductError, match="register of result gravel_band cannot be read"):
        prepare(path).register("gravel_band")


def test_a_flush_writes_what_is_new_and_forgets_what_is_full(tmp_path, monkeypatch):
    monkeypatch.setattr("pipeline_filters.product.register.CHUNK_UNITS", 4)
    register = prepare(tmp_path / "p").register("gravel_band")
    register.mark([unit(0, 0), unit(0, 1), unit(1, 0), unit(4, 0)])
    register.flush()
    written = []
    monkeypatch.setattr(chunk_files, "write_file", lambda name, data: written.append(name))
    register.flush()
    assert written == []
    register.mark([unit(1, 1)])
    register.flush()
    assert len(written) == 4
    assert set(register._blocks) == {(2, 0)}


def test_a_longer_source_only_lengthens_the_register(tmp_path):
    # What increments will do: the grid grows along time, units keep their places.
    path = tmp_path / "p"
    register = prepare(path).register("gravel_band")
    register.mark([unit(*place) for place in np.ndindex(5, 2)])
    register.flush()
    for name in ("input_digest", "output_digest", "surroundings", "state"):
        array = zarr.open_array(str(path / "register/gravel_band" / name), mode="r+")
        array.resize((9, *array.shape[1:]))
    longer = prepare(path).register("gravel_band")
    longer.mark([unit(4, 0, made=b"z"), unit(8, 1)])
    longer.flush()
    done = prepare(path).register("gravel_band").done()
    assert done.shape == (9, 2)
    assert done[:5].all()
    assert np.argwhere(done[5:]).tolist() == [[3, 1]]


@pytest.mark.parametrize("grid", [(1, 1), (10**6, 1), (10**6, 24), (3, 10**5), (7, 5000, 9)])
def test_files_of_the_register_do_not_depend_on_the_length(grid):
    chunks = grid_chunks(grid, 0)
    assert np.prod(chunks) <= CHUNK_UNITS
    assert grid_chunks((1, *grid[1:]), 0) == chunks
    assert np.prod(chunks) > CHUNK_UNITS // 2 - 1
