"""What flows between kernels: a run of samples of every row, with marks of the missing."""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

Samples = NDArray[np.floating[Any]]
Marks = NDArray[np.bool_]


class Slab(NamedTuple):
    """Samples and which of them are missing.

    Attributes:
        values: shape (rows, samples), float32 or float64, all finite: a missing sample
            holds a stand-in.
        missing: shape (rows, samples), true where the sample is missing; None where
            none is.
    """

    values: Samples
    missing: Marks | None = None

    @property
    def length(self) -> int:
        """Samples per row."""
        return int(self.values.shape[1])


def empty_slab(rows: int, dtype: np.dtype[Any]) -> Slab:
    """A slab of no samples."""
    return Slab(np.zeros((rows, 0), dtype), None)


def join_marks(parts: list[Slab]) -> Marks | None:
    """The marks of slabs laid end to end; None where nothing is missing."""
    if all(part.missing is None for part in parts):
        return None
    return np.concatenate(
        [
            np.zeros(part.values.shape, np.bool_) if part.missing is None else part.missing
            for part in parts
        ],
        axis=1,
    )


def join_slabs(parts: list[Slab]) -> Slab:
    """Slabs laid end to end; no copy where only one holds samples."""
    filled = [part for part in parts if part.length]
    if len(filled) == 1:
        return filled[0]
    if not filled:
        return parts[0]
    return Slab(np.concatenate([part.values for part in filled], axis=1), join_marks(filled))


def cut_slab(slab: Slab, start: int, stop: int) -> Slab:
    """Samples start to stop of every row, as a view; no marks where none is set."""
    missing = None if slab.missing is None else slab.missing[:, start:stop]
    if missing is not None and not missing.any():
        missing = None
    return Slab(slab.values[:, start:stop], missing)


def all_finite(rows: Samples) -> bool:
    """Whether no sample is NaN or infinite.

    A finite sum proves it in one pass without temporaries; only a sum that is not
    finite (which finite samples can also give, by overflow) needs the slow look.
    """
    with np.errstate(all="ignore"):
        if np.isfinite(rows.sum()):
            return True
    return bool(np.isfinite(rows).all())


def same_state(one: object, other: object) -> bool:
    """Whether two kernels hold the same carry, array by array and bit by bit."""
    if type(one) is not type(other):
        return False
    if isinstance(one, np.ndarray):
        assert isinstance(other, np.ndarray)
        return (
            one.dtype == other.dtype
            and one.shape == other.shape
            and np.ascontiguousarray(one).tobytes() == np.ascontiguousarray(other).tobytes()
        )
    if isinstance(one, (list, tuple)):
        assert isinstance(other, (list, tuple))
        return len(one) == len(other) and all(map(same_state, one, other))
    if isinstance(one, dict):
        assert isinstance(other, dict)
        return one.keys() == other.keys() and all(same_state(one[key], other[key]) for key in one)
    if hasattr(one, "__dict__"):
        return same_state(vars(one), vars(other))
    return bool(one == other)


class Comparable:
    """Equality of kernels by their whole state."""

    def __eq__(self, other: object) -> bool:
        """True where the other is of the same class and holds the same carry."""
        return same_state(self, other) if type(self) is type(other) else NotImplemented

    __hash__ = None  # type: ignore[assignment]
