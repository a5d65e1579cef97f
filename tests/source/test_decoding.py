"""Decoding beside a loop over samples and beside xarray; what CF attributes may say."""

from __future__ import annotations

import base64
import json
import struct
from dataclasses import replace

import numpy as np
import pytest
import xarray as xr
from hypothesis import given, settings
from hypothesis import strategies as st
from made_sources import PLATE, geophones, make_store, spread

from pipeline_filters.errors import SourceError
from pipeline_filters.source.cf_attributes import build_decoding
from pipeline_filters.source.decoding import Decoding, all_finite
from pipeline_filters.source.zarr_source import open_zarr_source

F8 = np.dtype(np.float64)
WHERE = "store, variable velocity"


def decoded(raw, dtype=F8, signal=PLATE, **attrs):
    raw = np.asarray(raw)
    return build_decoding(raw.dtype, attrs, signal, WHERE).decode(raw, np.dtype(dtype))


def by_loop(raw, attrs):
    """One sample after another, in Python's own numbers."""
    low, high = attrs.get("valid_range", (attrs.get("valid_min"), attrs.get("valid_max")))
    markers = [*np.atleast_1d(attrs.get("missing_value", [])), attrs.get("_FillValue")]
    out = []
    for sample in raw.ravel():
        value = sample.item()
        gone = any(m is not None and sample == raw.dtype.type(m) for m in markers)
        gone |= (low is not None and value < low) or (high is not None and value > high)
        scale, offset = attrs.get("scale_factor"), attrs.get("add_offset")
        value = float(value) if scale is None else float(value) * scale
        out.append(np.nan if gone else value if offset is None else value + offset)
    return np.reshape(np.array(out, np.float64), raw.shape)


PACKINGS = [
    {},
    {"scale_factor": 0.1},
    {"add_offset": -3.7},
    {"scale_factor": 1e-3, "add_offset": 273.15},
    {"_FillValue": -7},
    {"missing_value": [3, 5], "_FillValue": 4, "scale_factor": 0.25},
    {"valid_min": -5, "scale_factor": 0.3},
    {"valid_max": 6},
    {"valid_range": [-5, 6], "_FillValue": 0, "add_offset": 1.5},
]


@pytest.mark.parametrize("order", ["<", ">"])
@pytest.mark.parametrize("dtype", ["i1", "i2", "i4", "i8", "f2", "f4", "f8"])
@pytest.mark.parametrize("attrs", PACKINGS, ids=str)
def test_every_type_beside_a_loop(dtype, order, attrs):
    raw = np.arange(-12, 12).reshape(2, 12).astype(order + dtype)
    kept = raw.copy()
    for given_as in (raw, raw[:, ::2], np.asfortranarray(raw)):
        got = decoded(given_as, **attrs)
        np.testing.assert_array_equal(got, by_loop(given_as, attrs))
        assert got.dtype.isnative
        assert got.dtype == (np.float32 if dtype in ("f2", "f4") and not packs(attrs) else F8)
    np.testing.assert_array_equal(raw, kept)


def packs(attrs):
    return bool({"scale_factor", "add_offset"} & attrs.keys())


@given(st.lists(st.integers(-(2**63), 2**63 - 1), min_size=1), st.floats(1e-9, 1e9))
@settings(deadline=None, max_examples=50)
def test_large_integers_are_rounded_as_float64_rounds_them(samples, scale):
    got = decoded(np.array(samples, np.int64), scale_factor=scale, add_offset=0.5)
    assert got.tolist() == [float(n) * scale + 0.5 for n in samples]


def test_markers_of_64_bits_are_told_exactly():
    near = [2**53, 2**53 + 1, 2**63 - 1]
    got = decoded(np.array(near), _FillValue=2**53 + 1, missing_value=2**63 - 1)
    assert np.isnan(got).tolist() == [False, True, True]
    got = decoded(np.array([2**64 - 1, 2**64 - 2], np.uint64), _FillValue=2**64 - 1)
    assert np.isnan(got).tolist() == [True, False]


def test_the_working_precision_is_taken_last():
    raw = np.array([16_777_217, 3], np.int32)
    got = decoded(raw, np.float32, scale_factor=0.1, add_offset=1.0)
    np.testing.assert_array_equal(got, np.float32([16_777_217 * 0.1 + 1.0, 3 * 0.1 + 1.0]))


def test_nothing_to_do_copies_nothing():
    raw = np.ones((2, 3), np.float32)
    assert decoded(raw, _FillValue=-999.0) is raw


@pytest.mark.parametrize("fill", [-999.9, 9.969209968386869e36, 3.40282347e38, float("inf")])
def test_markers_of_floats_are_rounded_as_samples_are(fill):
    # 3.40282347e38 is how C prints the largest float32, which is a little less.
    with np.errstate(over="ignore"):
        raw = np.array([0, np.float64(fill).astype(np.float32)], np.float32)
    assert np.isnan(decoded(raw, _FillValue=fill)).tolist() == [False, True]


def test_xarrays_texts_of_floats_are_read():
    # xarray keeps the _FillValue of floats in Zarr v3 as base64 of eight bytes.
    text = base64.b64encode(struct.pack("<d", -1e30)).decode()
    raw = np.array([1, -1e30], np.float32)
    for fill in (text, "-1e30", np.float32(-1e30), np.array(-1e30), np.array([-1e30])):
        assert np.isnan(decoded(raw, _FillValue=fill)).tolist() == [False, True]
    assert np.isnan(decoded(raw, _FillValue="NaN")).tolist() == [False, False]


@pytest.mark.parametrize(
    ("attrs", "raw", "wanted"),
    [
        ({"_FillValue": -1}, [0, 127, -128, -1], [0, 127, 128, np.nan]),
        ({"_FillValue": 255}, [0, 127, -128, -1], [0, 127, 128, np.nan]),
        ({"valid_range": [1, -2]}, [0, 1, -2, -1], [np.nan, 1, 254, np.nan]),
        ({"valid_range": [1, 254]}, [0, 1, -2, -1], [np.nan, 1, 254, np.nan]),
        # -9999 is no sample of eight bits; taken modulo 256 it would be 241.
        ({"missing_value": -9999}, [241 - 256, 5], [241, 5]),
    ],
)
def test_signed_integers_read_as_unsigned(attrs, raw, wanted):
    got = decoded(np.array(raw, "i1"), _Unsigned="true", **attrs)
    np.testing.assert_array_equal(got, wanted)


def test_unsigned_integers_read_as_signed():
    got = decoded(np.array([1, 65_535, 32_768], ">u2"), _Unsigned="false", _FillValue=32_768)
    np.testing.assert_array_equal(got, [1, -1, np.nan])


def test_infinite_samples_are_missing_where_the_spec_says_so():
    lenient = replace(PLATE, infinite="missing", missing=spread())
    raw = np.array([1, np.inf, -np.inf, np.nan], np.float32)
    np.testing.assert_array_equal(decoded(raw), raw)
    np.testing.assert_array_equal(decoded(raw, signal=lenient), [1, np.nan, np.nan, np.nan])
    # What scaling makes infinite counts as well.
    huge = decoded(np.array([2, 1]), signal=lenient, scale_factor=1e308)
    np.testing.assert_array_equal(huge, [np.nan, 1e308])


def test_sums_that_cancel_or_overflow_do_not_hide_anything():
    assert not all_finite(np.array([np.inf, -np.inf]))
    assert all_finite(np.array([1e300, -1e300]))
    big = np.full(4, 1e308)
    np.testing.assert_array_equal(Decoding(infinite_missing=True).decode(big, F8), big)


UNREADABLE = [
    ({"scale_factor": "fast"}, "attribute scale_factor: 'fast', which is no number"),
    ({"scale_factor": [1, 2]}, r"attribute scale_factor: \[1, 2\]; one finite number"),
    ({"add_offset": float("inf")}, "attribute add_offset"),
    ({"add_offset": 10**400}, r"attribute add_offset: 1000+\.\.\., which is no number"),
    ({"_FillValue": True}, "True, which is no number"),
    ({"missing_value": [1, None]}, "None, which is no number"),
    ({"missing_value": {"a": 1}}, "no number"),
    ({"valid_range": [1]}, r"\[1\]; two numbers"),
    ({"valid_min": float("nan")}, r"\[nan\]; one finite number"),
    ({"valid_min": 3, "valid_max": 2}, "valid values from 3 to 2; a range that samples can lie in"),
    ({"valid_range": [1e39, 1e40]}, "valid values from"),
]


@pytest.mark.parametrize("dtype", ["i2", "f4"])
@pytest.mark.parametrize(("attrs", "said"), UNREADABLE, ids=str)
def test_attributes_that_cannot_be_read_are_refused(dtype, attrs, said):
    with pytest.raises(SourceError, match=said) as refused:
        decoded(np.zeros(3, dtype), **attrs)
    for problem in refused.value.problems:
        assert problem.where.startswith(WHERE)
        assert problem.allowed
        assert problem.remedy


@pytest.mark.parametrize("value", [2**70, -(2**1000), 1e300, -5e300, [], [0, 2**64]])
@pytest.mark.parametrize("key", ["_FillValue", "missing_value", "valid_range", "scale_factor"])
@pytest.mark.parametrize("dtype", ["i1", "u8", "f2", "f4", "f8"])
def test_numbers_of_any_size_are_read_or_refused(dtype, key, value):
    try:
        decoding = build_decoding(np.dtype(dtype), {key: value}, PLATE, WHERE)
    except SourceError:
        return
    decoding.decode(np.ones(3, dtype), F8)


def test_facts_are_json_and_do_not_depend_on_how_numbers_are_written():
    for dtype, low in (("f4", 3), ("f4", np.float32(3)), ("f4", 3.0)):
        decoding = build_decoding(
            np.dtype(dtype), {"_FillValue": float("inf"), "valid_min": low}, PLATE, WHERE
        )
        facts = json.loads(json.dumps(decoding.facts(), allow_nan=False))
        assert facts["markers"] == ["inf"]
        assert json.dumps(facts["low"]) == "3.0"


# Beside xarray

XARRAY_READS = [
    ("i2", {"scale_factor": 0.5, "add_offset": 8.0, "_FillValue": 3}, 0),
    ("i2", {"scale_factor": 0.1, "add_offset": 1.3, "missing_value": 4}, 2e-7),
    ("i4", {"scale_factor": 0.1, "_FillValue": 5}, 0),
    ("u1", {"_FillValue": 255}, 0),
    ("i1", {"_Unsigned": "true", "_FillValue": -1, "scale_factor": 0.5}, 0),
    (">i4", {"scale_factor": 0.1, "add_offset": 0.7}, 0),
    ("f4", {"_FillValue": 6.0}, 0),
    (">f4", {"missing_value": 6.0}, 0),
    ("f8", {"scale_factor": 0.1, "_FillValue": 6.0}, 0),
    (">f8", {}, 0),
]


@pytest.mark.parametrize("zarr_format", [2, 3])
@pytest.mark.parametrize(("dtype", "attrs", "tolerance"), XARRAY_READS, ids=str)
def test_values_are_those_of_xarray(tmp_path, dtype, attrs, tolerance, zarr_format):
    """xarray computes small packed integers in float32, hence the tolerance."""
    raw = np.arange(24).reshape(12, 2).astype(dtype)
    raw[-1] = -1 if raw.dtype.kind != "u" else 255
    attrs, fill = dict(attrs), None
    if zarr_format == 2:
        fill = attrs.pop("_FillValue", None)  # where format 2 keeps it
    elif "_FillValue" in attrs and raw.dtype.kind == "f":
        packed = struct.pack("<d", attrs["_FillValue"])
        attrs["_FillValue"] = base64.b64encode(packed).decode()
    labels = np.array(geophones(2), np.dtypes.StringDType())
    path = make_store(
        tmp_path / "s.zarr",
        raw,
        np.arange(12),
        zarr_format=zarr_format,
        fill_value=fill,
        labels=labels if zarr_format == 3 else False,
        **attrs,
    )
    signal = replace(PLATE, missing=spread())
    reader = open_zarr_source(path, {"plate": signal}).readers["plate"]
    got = reader.decode(reader.rows(reader.read(0, 12, (slice(0, 2),))), F8)
    wanted = xr.open_zarr(path, consolidated=False).velocity.values.T
    assert np.isnan(got).any() == bool(attrs.keys() & {"_FillValue", "missing_value"} or fill)
    np.testing.assert_allclose(got, wanted, rtol=tolerance, atol=0)


def test_a_fill_value_alone_is_no_marker_in_format_3(tmp_path):
    path = make_store(tmp_path / "s.zarr", np.full((4, 2), 7, "i2"), np.arange(4), fill_value=7)
    reader = open_zarr_source(path, {"plate": PLATE}).readers["plate"]
    assert reader.decoding.markers == ()


@pytest.mark.parametrize(("fill", "markers"), [(0, ()), (7, (7,)), (None, ())])
def test_the_fill_value_of_format_2_is_a_marker_unless_it_is_0(tmp_path, fill, markers):
    path = make_store(
        tmp_path / "s.zarr", np.ones((4, 2), "i2"), np.arange(4), zarr_format=2, fill_value=fill
    )
    assert open_zarr_source(path, {"plate": PLATE}).readers["plate"].decoding.markers == markers
