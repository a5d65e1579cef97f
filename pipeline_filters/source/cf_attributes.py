"""What a variable's CF attributes say of its samples: a `Decoding`."""

from __future__ import annotations

import base64
import struct
from collections.abc import Mapping
from math import ceil, floor, inf, isfinite, isnan
from typing import Any

import numpy as np

from pipeline_filters.errors import Problem, SourceError
from pipeline_filters.source.decoding import Decoding
from pipeline_filters.spec.findings import shortened
from pipeline_filters.spec.model import Signal

MARKERS = ("_FillValue", "missing_value")
_RANGE = ("valid_min", "valid_max", "valid_range")
_PACKING = ("scale_factor", "add_offset")
_WANTED = {"valid_range": 2, **dict.fromkeys(("valid_min", "valid_max", *_PACKING), 1)}
_REAL = "float16, float32, float64 or integers"


def build_decoding(
    dtype: np.dtype[Any], attrs: Mapping[str, Any], signal: Signal, where: str
) -> Decoding:
    """Reads the CF attributes of a variable.

    Args:
        dtype: of the raw samples.
        where: the variable, for people.

    Raises:
        SourceError: samples that are not real numbers, attributes that cannot be read.
    """
    if dtype.kind == "c":
        raise SourceError(
            Problem(
                where,
                f"complex samples ({dtype})",
                f"real samples: {_REAL}",
                "store the real and the imaginary part as two variables",
            )
        )
    if dtype.kind not in "fiu" or dtype.itemsize > 8:
        raise SourceError(
            Problem(
                where,
                f"samples of type {dtype}",
                _REAL,
                "store the samples as numbers, or name another variable",
            )
        )
    read_as = _read_as(dtype, attrs)
    problems: list[Problem] = []
    found: dict[str, tuple[float, ...]] = {}
    for key in (*MARKERS, *_RANGE, *_PACKING):
        if key in attrs:
            place, before = f"{where}, attribute {key}", len(problems)
            found[key] = numbers(attrs[key], dtype, place, problems)
            if len(problems) == before and not _of_use(key, found[key]):
                problems.append(_not_so_many(place, found[key], _WANTED[key]))
    if problems:
        raise SourceError(*problems)
    if read_as != dtype:
        for key in (*MARKERS, *_RANGE):
            found[key] = tuple(_wrapped(value, dtype, read_as) for value in found.get(key, ()))
    low, high = _bounds(found, read_as, where)
    scale, offset = (found[key][0] if key in found else None for key in _PACKING)
    markers = [value for key in MARKERS for value in found.get(key, ())]
    return Decoding(
        markers=tuple(dict.fromkeys(as_stored(v, read_as) for v in markers if fits(v, read_as))),
        low=low,
        high=high,
        scale=None if scale is None else float(scale),
        offset=None if offset is None else float(offset),
        packed=dtype.kind in "iu" or scale is not None or offset is not None,
        signedness=read_as.kind if read_as != dtype else "",
        infinite_missing=signal.infinite == "missing",
    )


def _read_as(dtype: np.dtype[Any], attrs: Mapping[str, Any]) -> np.dtype[Any]:
    """The type that raw samples are read as: _Unsigned tells integers' sign apart."""
    said = str(attrs.get("_Unsigned", "")).lower()
    native = dtype.newbyteorder("=")
    if (native.kind, said) == ("i", "true"):
        return np.dtype(f"u{native.itemsize}")
    if (native.kind, said) == ("u", "false"):
        return np.dtype(f"i{native.itemsize}")
    return dtype


def _wrapped(value: float, dtype: np.dtype[Any], read_as: np.dtype[Any]) -> float:
    """A marker given in the stored type's sign, in the sign that samples are read in."""
    if not fits(value, dtype):
        return value
    bits = 8 * int(read_as.itemsize)
    wrapped = int(value) % (1 << bits)
    return wrapped - (1 << bits) if read_as.kind == "i" and wrapped >> (bits - 1) else wrapped


def _bounds(
    found: Mapping[str, tuple[float, ...]], dtype: np.dtype[Any], where: str
) -> tuple[float | None, float | None]:
    """The valid range in raw values, as far as a raw sample can lie outside it."""
    ranged = found.get("valid_range") or (-inf, inf)
    low = max(ranged[0], *found.get("valid_min") or (-inf,), -inf)
    high = min(ranged[1], *found.get("valid_max") or (inf,), inf)
    least: float
    most: float
    if dtype.kind == "f":
        least, most = float(np.finfo(dtype).min), float(np.finfo(dtype).max)
    else:
        least, most = int(np.iinfo(dtype).min), int(np.iinfo(dtype).max)
        low = ceil(low) if isfinite(low) else low
        high = floor(high) if isfinite(high) else high
    if not (low <= high and low <= most and high >= least):
        raise SourceError(
            Problem(
                where,
                f"valid values from {low!r} to {high!r}",
                "a range that samples can lie in",
                "mend valid_min, valid_max or valid_range",
            )
        )
    # Infinities in floats are left to the policy for infinite samples where no bound is stated.
    bounded_low = low > least or (dtype.kind == "f" and low > -inf)
    bounded_high = high < most or (dtype.kind == "f" and high < inf)
    return (
        as_stored(max(low, least), dtype) if bounded_low else None,
        as_stored(min(high, most), dtype) if bounded_high else None,
    )


def fits(value: float, dtype: np.dtype[Any]) -> bool:
    """Whether a raw sample can equal the marker at all; NaN is missing without a marker."""
    if value != value:
        return False
    if dtype.kind == "f":
        # Rounded first: decimals of the largest float lie a little above it.
        return abs(value) == inf or isfinite(as_stored(value, dtype))
    if abs(value) == inf:
        return False
    return bool(value == int(value) and np.iinfo(dtype).min <= value <= np.iinfo(dtype).max)


def as_stored(value: float, dtype: np.dtype[Any]) -> float:
    """A marker as raw samples hold it: rounded to their type, an int for integers."""
    if dtype.kind in "iu":
        return int(value)
    with np.errstate(over="ignore"):
        return float(np.float64(value).astype(dtype))


def numbers(
    value: Any, dtype: np.dtype[Any], where: str, problems: list[Problem]
) -> tuple[float, ...]:
    """The numbers of an attribute, int or float; what is none is added to ``problems``."""
    values = np.atleast_1d(value) if isinstance(value, np.ndarray) else value
    if not isinstance(values, (list, tuple, np.ndarray)):
        values = [value]
    out: list[float] = []
    for item in values:
        number = item.item() if isinstance(item, np.generic) else item
        if isinstance(number, str):
            number = _text_number(number, dtype)
        if (
            isinstance(number, bool)
            or not isinstance(number, (int, float))
            or (isinstance(number, int) and abs(number) >= 2**1023)
        ):
            shown = shortened(repr(item))
            problems.append(
                Problem(where, f"{shown}, which is no number", "numbers", "mend the attribute")
            )
        else:
            out.append(number)
    return tuple(out)


def _of_use(key: str, values: tuple[float, ...]) -> bool:
    """Whether there are as many numbers as the attribute needs, and of the right kind."""
    if key in MARKERS:
        return True
    unfit = any(map(isnan, values)) if key in _RANGE else not all(map(isfinite, values))
    return len(values) == _WANTED[key] and not unfit


def _not_so_many(where: str, found: tuple[float, ...], wanted: int) -> Problem:
    allowed = "one finite number" if wanted == 1 else "two numbers"
    return Problem(where, f"{list(found)}", allowed, "mend the attribute")


def _text_number(text: str, dtype: np.dtype[Any]) -> float | None:
    """Attributes of Zarr v3 may hold a float as base64 of eight little-endian bytes, and
    NaN and infinities as words."""
    try:
        return float(text)
    except ValueError:
        pass
    try:
        packed = base64.b64decode(text, validate=True)
        return float(struct.unpack("<d", packed)[0]) if dtype.kind == "f" else None
    except (ValueError, struct.error):
        return None
