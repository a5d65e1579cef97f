"""Digests of units: of values in order, whatever their memory."""

from __future__ import annotations

import tracemalloc

import numpy as np
import pytest
import xxhash
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import array_shapes, arrays

from pipeline_filters.product.digest import DIGEST_BYTES, unit_digest
from pipeline_filters.product.surroundings import surroundings


@settings(deadline=None, max_examples=50)
@given(
    values=arrays(
        st.sampled_from(["<f4", "<f8", "<i2", "<i4"]),
        array_shapes(min_dims=1, max_dims=3, max_side=5),
    )
)
def test_memory_order_and_byte_order_do_not_count(values):
    digest = unit_digest(values, None)
    assert len(digest) == DIGEST_BYTES
    assert unit_digest(np.asfortranarray(values), None) == digest
    assert unit_digest(values.astype(values.dtype.newbyteorder(">")), None) == digest
    wide = np.zeros((*values.shape[:-1], values.shape[-1] * 2), values.dtype)
    wide[..., ::2] = values
    assert unit_digest(wide[..., ::2], None) == digest


def test_large_strided_units_are_digested_in_pieces(monkeypatch):
    values = np.random.default_rng(1).standard_normal((50, 40, 3))
    digest = unit_digest(values, None)
    for piece in (1, 100, 1000, 5000):
        monkeypatch.setattr("pipeline_filters.product.digest._PIECE_BYTES", piece)
        assert unit_digest(np.asfortranarray(values), None) == digest
        assert unit_digest(values[::-1][::-1], None) == digest


def test_everything_that_matters_counts():
    values = np.arange(12, dtype="f4").reshape(3, 4)
    stamps = np.arange(3)
    nan = values.copy()
    nan[0, 0] = np.nan
    found = [
        unit_digest(values, None),
        unit_digest(values, stamps),
        unit_digest(values, stamps + 1),
        unit_digest(values, None, b"{}"),
        unit_digest(values, None, b"{} "),
        unit_digest(values.reshape(4, 3), None),
        unit_digest(values.T, None),
        unit_digest(values.astype("f8"), None),
        unit_digest(values.view("i4"), None),
        unit_digest(nan, None),
        unit_digest(-values, None),
        unit_digest(values[:0], None),
        unit_digest(values, stamps[:0]),
    ]
    assert len(set(found)) == len(found)


def test_the_digest_is_xxh3_of_what_is_said():
    # The whole text at once, as the docstring describes it, against the pieces that are fed. Of no
    # bytes at all XXH3 128 makes what its author's own test table says (from memory).
    assert xxhash.xxh3_128_hexdigest(b"") == "99aa06d3014798d86001c324468d497f"
    values = np.array([[1, 2], [3, 4]], "<i2")
    text = b"<i2 2,2;3 bytes;abc1 stamps;" + (5).to_bytes(8, "little") + values.tobytes()
    assert unit_digest(values, np.array([5]), b"abc") == xxhash.xxh3_128_digest(text)


@pytest.mark.parametrize("order", ["C", "F"])
def test_no_copy_of_the_whole_is_made(order):
    values = np.zeros((60_000, 32), "f4", order=order)
    tracemalloc.start()
    unit_digest(values, None)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert peak < (10_000 if order == "C" else 3 << 20)


def test_surroundings_name_versions_and_processor():
    found = surroundings()
    assert found["versions"]["numpy"] == np.__version__
    assert set(found["versions"]) == {"numpy", "scipy", "zarr", "dask", "pipeline-filters"}
    assert found["processor"]["machine"]
    assert all(isinstance(name, str) for name in found["processor"]["simd"])
    assert surroundings() == found
