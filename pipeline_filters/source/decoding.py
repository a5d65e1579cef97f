"""Raw samples to physical values: scale, offset, missing markers, infinities."""

from __future__ import annotations

import base64
import struct
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pipeline_filters.errors import Problem, SourceError
from pipeline_filters.spec.model import Signal

_MARKERS = ("_FillValue", "missing_value")
_RANGE = ("valid_min", "valid_max", "valid_range")


@dataclass(frozen=True)
class Decoding:
    """How the raw samples of one variable become values; small, and safe to send about.

    Attributes:
        markers: raw values that stand for missing samples.
        low, high: raw values outside which a sample is missing; None where unbounded.
        scale, offset: value = float64(raw) * scale + offset, for packed data.
        packed: whether the samples are to be scaled or are integers.
        unsigned: raw integers are to be read as unsigned.
        infinite_missing: infinite samples count as missing.
    """

    markers: tuple[float, ...] = ()
    low: float | None = None
    high: float | None = None
    scale: float | None = None
    offset: float | None = None
    packed: bool = False
    unsigned: bool = False
    infinite_missing: bool = False

    def decode(self, raw: NDArray[Any], dtype: np.dtype[Any]) -> NDArray[Any]:
        """Values with NaN where missing; the raw array itself where nothing is to do.

        Markers and ranges are told on raw values. Packed values are formed in float64 and
        then taken to ``dtype``, the working precision.
        """
        if self.unsigned:
            raw = raw.view(f"u{raw.dtype.itemsize}")
        missing = self._missing(raw)
        values = raw
        if self.packed:
            values = raw.astype(np.float64)
            if self.scale is not None:
                values *= self.scale
            if self.offset is not None:
                values += self.offset
            values = values.astype(dtype, copy=False)
        elif raw.dtype.kind == "f" and raw.dtype.itemsize == 2:
            values = raw.astype(np.float32)
        if self.infinite_missing and not _finite(values):
            infinite = np.isinf(values)
            missing = infinite if missing is None else missing | infinite
        if missing is None or not missing.any():
            return values
        return np.where(missing, values.dtype.type(np.nan), values)

    def _missing(self, raw: NDArray[Any]) -> NDArray[np.bool_] | None:
        missing: NDArray[np.bool_] | None = None
        tests = [raw == raw.dtype.type(marker) for marker in self.markers]
        if self.low is not None:
            tests.append(raw < self.low)
        if self.high is not None:
            tests.append(raw > self.high)
        for test in tests:
            missing = test if missing is None else missing | test
        return missing

    def facts(self) -> dict[str, Any]:
        """The decoding as JSON-able facts."""
        return {key: list(v) if isinstance(v, tuple) else v for key, v in vars(self).items()}


def _finite(values: NDArray[Any]) -> bool:
    with np.errstate(all="ignore"):
        return bool(np.isfinite(values.sum()))


def build_decoding(dtype: np.dtype[Any], attrs: Mapping[str, Any], signal: Signal) -> Decoding:
    """Reads the CF attributes of a variable.

    Raises:
        SourceError: samples that are not real numbers, attributes that cannot be read.
    """
    where = f"variable {signal.variable}"
    if dtype.kind == "c":
        raise SourceError(
            Problem(
                where,
                f"complex samples ({dtype})",
                "real samples: float16, float32, float64 or integers",
                "store the real and the imaginary part as two variables",
            )
        )
    if dtype.kind not in "fiu" or dtype.itemsize > 8:
        raise SourceError(
            Problem(where, f"samples of type {dtype}", "float16, float32, float64 or integers")
        )
    problems: list[Problem] = []
    numbers = {
        key: _numbers(attrs[key], dtype, f"{where}, attribute {key}", problems)
        for key in (*_MARKERS, *_RANGE, "scale_factor", "add_offset")
        if key in attrs
    }
    if "valid_range" in numbers and len(numbers["valid_range"]) != 2 and not problems:
        problems.append(Problem(f"{where}, attribute valid_range", "not two numbers"))
    if problems:
        raise SourceError(*problems)
    low, high = numbers.get("valid_range", (None, None))
    scale = numbers.get("scale_factor", (None,))[0]
    offset = numbers.get("add_offset", (None,))[0]
    markers = [value for key in _MARKERS for value in numbers.get(key, ())]
    unsigned = dtype.kind == "i" and str(attrs.get("_Unsigned", "false")).lower() == "true"
    if unsigned:
        markers = [value % 2 ** (8 * dtype.itemsize) for value in markers]
    low = numbers.get("valid_min", (low,))[0]
    high = numbers.get("valid_max", (high,))[0]
    return Decoding(
        tuple(dict.fromkeys(v for v in markers if v == v and _fits(v, dtype, unsigned))),
        low,
        high,
        scale,
        offset,
        dtype.kind in "iu" or scale is not None or offset is not None,
        unsigned,
        signal.infinite == "missing",
    )


def _fits(value: float, dtype: np.dtype[Any], unsigned: bool) -> bool:
    """Whether a raw sample can equal the marker at all."""
    if dtype.kind == "f":
        return True
    bounds = np.iinfo(f"u{dtype.itemsize}" if unsigned else dtype)
    return value == int(value) and bounds.min <= value <= bounds.max


def _numbers(
    value: Any, dtype: np.dtype[Any], where: str, problems: list[Problem]
) -> tuple[float, ...]:
    values = value if isinstance(value, (list, tuple, np.ndarray)) else [value]
    out: list[float] = []
    for item in values:
        number = item.item() if isinstance(item, np.generic) else item
        if isinstance(number, str):
            number = _text_number(number, dtype)
        if isinstance(number, bool) or not isinstance(number, (int, float)):
            problems.append(Problem(where, f"{item!r}, which is no number"))
            return (0.0,)
        out.append(number)
    return tuple(out)


def _text_number(text: str, dtype: np.dtype[Any]) -> float | None:
    """Zarr v3 attributes hold float markers as base64 of eight little-endian bytes."""
    try:
        return float(text)
    except ValueError:
        pass
    try:
        packed = base64.standard_b64decode(text)
        return float(struct.unpack("<d", packed)[0]) if dtype.kind == "f" else None
    except (ValueError, struct.error):
        return None
