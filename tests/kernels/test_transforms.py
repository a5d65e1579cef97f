"""What the transforms' bits must not depend on: rows beside them, layout, threads."""

from __future__ import annotations

import pickle
import threading

import numpy as np
import pytest

from pipeline_filters.kernels.overlap_add import OverlapAdd, copy_rows

DTYPES = [np.dtype(np.float32), np.dtype(np.float64)]
# (taps, N): even and odd N, 2^k and 3 * 2^k, and one whose batch is a set of lanes at most.
SIZES = [(5, 15), (31, 1024), (100, 1536), (501, 4096), (2001, 24576), (20001, 196608)]


def kernel(rows, taps, transform, dtype, start=0):
    hop = transform - taps.size + 1
    return OverlapAdd(
        rows, taps, hop=hop, transform=transform, start=start, emit_from=start, dtype=dtype
    )


def convolved(x, taps, transform, dtype, cuts=(), start=0):
    flow = kernel(x.shape[0], taps, transform, dtype, start)
    parts = [flow.push(piece) for piece in np.split(x, cuts, axis=1)]
    return np.concatenate([*parts, flow.finish()], axis=1)


@pytest.mark.parametrize("dtype", DTYPES, ids=str)
@pytest.mark.parametrize(("count", "transform"), SIZES)
def test_a_row_has_the_same_bits_whatever_is_transformed_with_it(count, transform, dtype):
    rng = np.random.default_rng(count)
    taps = rng.standard_normal(count)
    hop = transform - count + 1
    x = rng.standard_normal((7, 3 * hop + hop // 2)).astype(dtype)
    whole = convolved(x, taps, transform, dtype)
    assert whole.dtype == dtype
    assert whole.shape == x.shape
    for group in (slice(0, 1), slice(1, 3), slice(2, 5), slice(3, 7)):
        alone = convolved(x[group], taps, transform, dtype)
        assert alone.tobytes() == whole[group].tobytes()
    for cuts in ([hop], [hop // 3, hop + hop // 2, 3 * hop], [2 * hop + 1]):
        assert convolved(x, taps, transform, dtype, cuts).tobytes() == whole.tobytes()


@pytest.mark.parametrize("dtype", DTYPES, ids=str)
@pytest.mark.parametrize("rows", [1, 2, 40])
@pytest.mark.parametrize(("count", "transform"), SIZES[:4])
def test_layout_and_type_of_the_samples_do_not_change_bits(rows, count, transform, dtype):
    rng = np.random.default_rng(rows)
    taps = rng.standard_normal(count)
    hop = transform - count + 1
    x = rng.standard_normal((rows, 5 * hop + 3)).astype(np.float32)
    cuts, start = [hop // 2, 3 * hop], hop // 2
    whole = convolved(x.astype(dtype), taps, transform, dtype, cuts, start).tobytes()
    backward = x[:, ::-1].copy()[:, ::-1]
    for same in (x, np.asfortranarray(x), np.asfortranarray(x.astype(dtype)), backward):
        assert convolved(same, taps, transform, dtype, cuts, start).tobytes() == whole


def test_kernels_in_threads_do_not_share_their_workspace():
    rng = np.random.default_rng(3)
    taps = rng.standard_normal(501)
    inputs = [rng.standard_normal((5, 40_000)) for _ in range(4)]
    alone = [convolved(x, taps, 4096, DTYPES[1]).tobytes() for x in inputs]
    same: list[bool] = []

    def work(index):
        for _ in range(5):
            same.append(convolved(inputs[index], taps, 4096, DTYPES[1]).tobytes() == alone[index])

    threads = [threading.Thread(target=work, args=(index,)) for index in range(len(inputs))]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert same == [True] * 20


def test_results_given_are_not_written_to_again():
    rng = np.random.default_rng(4)
    x = rng.standard_normal((3, 10_000))
    flow = kernel(3, rng.standard_normal(31), 1024, DTYPES[1])
    first = flow.push(x)
    kept = first.copy()
    flow.push(x)
    flow.finish()
    np.testing.assert_array_equal(first, kept)


def test_the_workspace_is_no_part_of_the_state():
    flow = kernel(1, np.ones(31), 1024, DTYPES[1])
    before = len(pickle.dumps(flow))
    flow.push(np.ones((1, 1_000_000)))
    # What is added is one block not full yet.
    assert len(pickle.dumps(flow)) < before + 2 * flow.hop * 8
    assert pickle.loads(pickle.dumps(flow)) == flow


@pytest.mark.parametrize("dtype", DTYPES, ids=str)
def test_what_overflows_shows_in_the_results_without_a_warning(dtype):
    x = np.full((2, 3000), np.finfo(dtype).max, dtype)
    out = convolved(x, np.ones(31), 1024, dtype)
    assert not np.isfinite(out[:, 1000:2000]).any()


def test_an_overflow_leaves_nothing_in_the_workspace():
    # Rows that fill up a set of lanes must not carry what was there before.
    dtype = DTYPES[0]
    rng = np.random.default_rng(6)
    x, taps = rng.standard_normal((3, 2000)).astype(dtype), rng.standard_normal(31)
    before = convolved(x, taps, 1024, dtype).tobytes()
    convolved(np.full((8, 3000), np.finfo(dtype).max, dtype), taps, 1024, dtype)
    assert convolved(x, taps, 1024, dtype).tobytes() == before


@pytest.mark.parametrize("kept", DTYPES, ids=str)
@pytest.mark.parametrize("given", DTYPES, ids=str)
@pytest.mark.parametrize("shape", [(1, 5000), (3, 1), (32, 5001), (5, 0)])
def test_copies_between_layouts(shape, given, kept):
    x = np.random.default_rng(0).standard_normal(shape).astype(given)
    for source in (x, np.asfortranarray(x), x[:, ::-1]):
        for target in (np.empty(shape, kept), np.empty(shape, kept, order="F")):
            copy_rows(target, source)
            np.testing.assert_array_equal(target, source.astype(kept))
