"""What a source offers before anything is known of the spec: arrays by their names."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

# Dimensions, values, attributes.
Coordinate = tuple[tuple[str, ...], NDArray[Any], Mapping[str, Any]]


@dataclass(frozen=True, eq=False)
class Offer:
    """One array that a source offers.

    Attributes:
        dims: () where they have no names.
        attrs: CF attributes.
        load: reads all of it; for small coordinates.
        array: the array itself, of the library that opened it.
    """

    name: str
    dims: tuple[str, ...]
    shape: tuple[int, ...]
    dtype: np.dtype[Any]
    attrs: Mapping[str, Any]
    load: Callable[[], NDArray[Any]]
    array: Any


class Offers(Protocol):
    """All that a source offers."""

    @property
    def where(self) -> str:
        """The source, for people."""

    def find(self, name: str) -> Offer | None:
        """An array by its name; None where there is none.

        Raises:
            SourceError: an array that cannot be opened, or whose values are not as stored.
        """

    def names(self) -> list[str]:
        """The names of all arrays, sorted."""

    def shared_coordinates(self) -> str:
        """The names of coordinates that no single variable lists, with spaces between."""
