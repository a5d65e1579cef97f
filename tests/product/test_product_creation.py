"""Making a product: what lies in it, and that a crash at any step can be finished."""

from __future__ import annotations

import json
import warnings

import numpy as np
import pytest
import zarr
from made_products import IDENTITY, SPEC, fill, plan, prepare, tree_digest
from zarr.storage import LocalStore

from pipeline_filters.product import creation, files, nodes
from pipeline_filters.product.store import Product


class CrashError(Exception):
    pass


def contents(path):
    """All files but the lock's, the times of day in history lines taken out."""
    found = {}
    for file in sorted(path.rglob("*")):
        if file.is_file() and file.name != "held":
            text = file.read_bytes()
            if file.name == "zarr.json":
                text = json.dumps(timeless(json.loads(text))).encode()
            found[str(file.relative_to(path))] = text
    return found


def timeless(node):
    if isinstance(node, dict):
        return {key: "" if key == "history" else timeless(one) for key, one in node.items()}
    return node


def crash_at(monkeypatch, step: int, *, torn: bool) -> list[int]:
    """Has the step-th write of a file fail; torn: after a part of it, with no tidying."""
    count = [0]
    write_file = files.write_file

    def failing_write(path, data):
        count[0] += 1
        if count[0] == step:
            if torn:
                files.os.makedirs(files.os.path.dirname(path), exist_ok=True)
                with open(f"{path}.{'0' * 32}.partial", "wb") as file:
                    file.write(b"{")
            raise CrashError
        write_file(path, data)

    monkeypatch.setattr(nodes, "write_file", failing_write)
    monkeypatch.setattr(creation, "write_file", failing_write)
    return count


def test_only_one_way_leads_to_a_file(tmp_path, monkeypatch):
    # Else the crashes below would not be at every write.
    async def fail(self, key, value):
        raise AssertionError(key)

    monkeypatch.setattr(LocalStore, "set", fail)
    product = prepare(tmp_path / "p")
    fill(product, "gravel_band", np.zeros((250, 3), np.float32))
    product.end("gravel_band", 249, {})


@pytest.mark.parametrize("torn", [False, True])
def test_a_crash_at_any_write_can_be_finished(tmp_path, monkeypatch, torn):
    plans = (plan(), plan("still_band", axis_kind="elapsed"))
    prepare(tmp_path / "whole", *plans)
    whole = contents(tmp_path / "whole")
    step = 0
    while True:
        step += 1
        path = tmp_path / f"p{step}"
        with monkeypatch.context() as patch:
            crash_at(patch, step, torn=torn)
            try:
                prepare(path, *plans)
            except CrashError:
                pass
            else:
                break
        assert Product.inspect(path).kind == "absent"
        with prepare(path, *plans).hold():
            assert contents(path) == whole
    assert step > 25


def test_what_another_plan_left_unfinished_is_taken_away(tmp_path, monkeypatch):
    path = tmp_path / "p"
    one = plan(
        coords={"depth": (("geophone",), np.zeros(3), {})}, coefficients={"taps_9": np.ones(3)}
    )
    with monkeypatch.context() as patch:
        patch.setattr("pipeline_filters.product.store.list_results", lambda *_, **__: 1 / 0)
        with pytest.raises(ZeroDivisionError):
            prepare(path, one)
    assert (path / "gravel_band/depth").exists()
    kept = prepare(path).stored_coefficients("gravel_band")
    assert sorted(kept) == ["sections_1", "taps_0"]
    assert not (path / "gravel_band/depth").exists()


def test_a_crash_while_a_result_is_added_leaves_the_others(tmp_path, monkeypatch):
    path = tmp_path / "p"
    prepare(path)
    for step in range(1, 15):
        with monkeypatch.context() as patch:
            crash_at(patch, step, torn=False)
            with pytest.raises(CrashError):
                prepare(path, plan(), plan("still_band"))
        assert list(Product.inspect(path).results) == ["gravel_band"]
    assert sorted(prepare(path, plan(), plan("still_band")).results) == [
        "gravel_band",
        "still_band",
    ]


def test_preparing_again_writes_nothing(tmp_path):
    prepare(tmp_path / "p")
    before = tree_digest(tmp_path / "p")
    product = prepare(tmp_path / "p")
    assert tree_digest(tmp_path / "p") == before
    assert product.notes == ()


def test_what_is_stored_comes_back(tmp_path):
    product = prepare(tmp_path / "p")
    state = Product.inspect(tmp_path / "p")
    assert (state.kind, state.spec_text, state.source_identity) == ("ours", SPEC, IDENTITY)
    result = state.results["gravel_band"]
    assert (result.dims, result.shape, result.unit) == (("time", "geophone"), (250, 3), (60, 2))
    assert (result.state, result.published_until) == ("growing", None)
    assert result.facts == {"taps": 181, "hop_samples": 844, "ripple_db": 0.1}
    assert product.grid("gravel_band") == (5, 2)
    kept = product.stored_coefficients("gravel_band")
    assert kept is not None
    np.testing.assert_array_equal(kept["taps_0"], np.linspace(0.0, 1.0, 7))
    assert kept["sections_1"].shape == (2, 6)
    assert product.stored_coefficients("other") is None


def test_coefficients_that_are_all_zero_are_kept(tmp_path):
    product = prepare(tmp_path / "p", plan(coefficients={"taps_0": np.zeros(3)}))
    assert (tmp_path / "p/coefficients/gravel_band/taps_0/c/0").exists()
    np.testing.assert_array_equal(product.stored_coefficients("gravel_band")["taps_0"], np.zeros(3))


def test_a_new_spec_text_and_a_new_result_are_taken(tmp_path):
    path = tmp_path / "p"
    prepare(path)
    before = tree_digest(path)
    prepare(path, spec_text="title: another\n")
    assert Product.inspect(path).spec_text == "title: another\n"
    prepare(path, plan("still_band"))
    assert sorted(Product.inspect(path).results) == ["gravel_band", "still_band"]
    after = tree_digest(path)
    changed = {name for name in before if before[name] != after[name]}
    assert changed == {"zarr.json", "register/.lock/held"}


def test_a_new_signal_of_a_new_result_is_added_to_the_identity(tmp_path):
    prepare(tmp_path / "p")
    more = {"pressure": {"shape": [250]}}
    prepare(tmp_path / "p", plan("still_band"), source_identity=more)
    assert Product.inspect(tmp_path / "p").source_identity == {**IDENTITY, **more}


def test_other_chunks_are_not_another_spec_and_are_noted(tmp_path):
    prepare(tmp_path / "p")
    product = prepare(tmp_path / "p", plan(chunks=(100, 3)))
    assert product.results["gravel_band"].chunks == (60, 2)
    assert "(60, 2)" in product.notes[0]


def test_the_copy_of_all_metadata_is_what_zarr_would_make(tmp_path):
    # The outside reference is Zarr's own consolidation of the same store.
    path = tmp_path / "p"
    product = prepare(path)
    product.register("gravel_band").mark([((0, 0), b"i" * 16, b"o" * 16)])
    product.end("gravel_band", 249, {"seconds": 1.5})
    ours = json.loads((path / "zarr.json").read_text())
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        zarr.consolidate_metadata(str(path))
    assert json.loads((path / "zarr.json").read_text()) == ours


def test_a_stale_copy_of_the_metadata_is_put_right(tmp_path, monkeypatch):
    path = tmp_path / "p"
    product = prepare(path)
    with monkeypatch.context() as patch:
        crash_at(patch, 2, torn=False)
        with pytest.raises(CrashError):
            product.end("gravel_band", 249, {})
    assert Product.inspect(path).results["gravel_band"].state == "ended"
    assert zarr.open_group(str(path), mode="r")["gravel_band"].attrs["state"] == "growing"
    prepare(path)
    assert zarr.open_group(str(path), mode="r")["gravel_band"].attrs["state"] == "ended"


def test_numbers_that_json_has_no_word_for_are_kept_as_text(tmp_path):
    prepare(tmp_path / "p", plan(facts={"worst_db": float("-inf"), "shares": (np.nan,)}))
    facts = Product.inspect(tmp_path / "p").results["gravel_band"].facts
    assert facts == {"worst_db": "-inf", "shares": ["nan"]}


def test_files_of_killed_writers_are_taken_away_by_the_next_run(tmp_path):
    path = tmp_path / "p"
    product = prepare(path)
    ours = [
        path / f"zarr.json.{'a' * 32}.partial",
        path / f"gravel_band/gravel_band/0.{'b' * 32}.partial",
    ]
    theirs = path / "gravel_band/gravel_band/notes.partial"
    for file in (*ours, theirs):
        file.write_bytes(b"half")
    with product.hold():
        assert not any(file.exists() for file in ours)
    assert theirs.exists()


def test_ending_writes_state_history_and_until(tmp_path):
    path = tmp_path / "p"
    product = prepare(
        path, plan(), plan("still_band", axis_kind="elapsed"), plan("raw", axis_kind="counted")
    )
    product.end("gravel_band", 1_700_000_000_123_456_789, {"units": np.int64(10)})
    product.end("still_band", 2_500_000_000, {})
    product.end("raw", 250, {})
    assert {name: state.published_until for name, state in product.results.items()} == {
        "gravel_band": "2023-11-14T22:13:20.123456789Z",
        "still_band": 2.5,
        "raw": 250,
    }
    attributes = zarr.open_group(str(path), path="gravel_band", mode="r").attrs
    assert attributes["run"] == {"units": 10}
    assert len(attributes["history"].splitlines()) == 2
    assert "published until 2023-11-14" in attributes["history"]
