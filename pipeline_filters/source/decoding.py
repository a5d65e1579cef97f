"""Raw samples to physical values: scale, offset, missing markers, infinities."""

from __future__ import annotations

from dataclasses import dataclass
from math import inf
from typing import Any

import numpy as np
from numpy.typing import NDArray

Array = NDArray[Any]


@dataclass(frozen=True)
class Decoding:
    """How the raw samples of one variable become values; small, and safe to send about.

    Attributes:
        markers: raw values that stand for missing samples, each one that a raw sample can be.
        low, high: raw values outside which a sample is missing; None where unbounded.
        scale, offset: value = float64(raw) * scale + offset; None where the source has none.
        packed: whether values are formed in float64 (integers, and what has scale or offset).
        signedness: ``u`` or ``i`` where raw integers are to be read as unsigned or signed
            although they are stored as the other; empty where they are read as stored.
        infinite_missing: infinite samples count as missing.
    """

    markers: tuple[float, ...] = ()
    low: float | None = None
    high: float | None = None
    scale: float | None = None
    offset: float | None = None
    packed: bool = False
    signedness: str = ""
    infinite_missing: bool = False

    def decode(self, raw: Array, dtype: np.dtype[Any]) -> Array:
        """Values with NaN where missing.

        Markers and ranges are told on raw values. Packed values are formed in float64, raw
        times scale and then plus offset, and taken to ``dtype``. Other values keep their type
        (float16 becomes float32).

        Args:
            raw: samples as stored, any shape and strides; never written to.
            dtype: the working precision, float32 or float64.

        Returns:
            values of the same shape; ``raw`` itself where nothing is to do.
        """
        raw = self._as_read(raw)
        missing = self._missing(raw)
        if self.packed:
            values = self._unpacked(raw, dtype)
        elif raw.dtype.itemsize == 2:
            values = raw.astype(np.float32)
        else:
            values = raw
        if self.infinite_missing and values.dtype.kind == "f" and not all_finite(values):
            infinite = np.isinf(values)
            missing = infinite if missing is None else missing | infinite
        if missing is None or not missing.any():
            return values
        if values is raw:
            values = raw.copy(order="K")
        np.copyto(values, np.nan, where=missing)
        return values

    def _as_read(self, raw: Array) -> Array:
        """In the machine's byte order, signed or unsigned as the source says."""
        if not raw.dtype.isnative:
            raw = raw.astype(raw.dtype.newbyteorder("="))
        return raw.view(f"{self.signedness}{raw.dtype.itemsize}") if self.signedness else raw

    def _unpacked(self, raw: Array, dtype: np.dtype[Any]) -> Array:
        with np.errstate(all="ignore"):  # too large: infinite, and the policy's to judge
            if self.scale is None:
                values: Array = raw.astype(np.float64)
            else:
                values = np.multiply(raw, self.scale, dtype=np.float64)
            if self.offset is not None:
                values += self.offset
            return values.astype(dtype, copy=False)

    def _missing(self, raw: Array) -> NDArray[np.bool_] | None:
        """Where markers and ranges say that samples are missing; None where they say nothing."""
        missing: NDArray[np.bool_] | None = None
        for marker in self.markers:
            missing = _joined(missing, raw == marker)
        if self.low is not None:
            missing = _joined(missing, raw < self.low)
        if self.high is not None:
            missing = _joined(missing, raw > self.high)
        return missing

    def facts(self) -> dict[str, Any]:
        """The decoding as JSON-able facts: an infinite marker, which JSON lacks, as a text."""
        markers = [str(m) if m in (inf, -inf) else m for m in self.markers]
        return {**vars(self), "markers": markers}


def _joined(one: NDArray[np.bool_] | None, other: NDArray[np.bool_]) -> NDArray[np.bool_]:
    if one is not None:
        other |= one
    return other


def all_finite(values: Array) -> bool:
    """Whether every value is finite; false for a sum that overflows as well.

    One pass without temporaries: a sum is not finite if one of its terms is not.
    """
    with np.errstate(all="ignore"):
        return bool(np.isfinite(values.sum()))
