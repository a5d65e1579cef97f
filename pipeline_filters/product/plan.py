"""What a result's place in a product is to be, and what an existing product holds."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, Literal

from numpy.typing import NDArray

Json = Any
AxisKind = Literal["stamped", "elapsed", "counted"]
Coordinate = tuple[tuple[str, ...], NDArray[Any], Mapping[str, Json]]


@dataclass(frozen=True, eq=False)
class ResultPlan:
    """What a result's place in the product is to be.

    Attributes:
        name: of the result, of its group and of the array in it.
        dims, shape, dtype, chunks, shards: of the array; shards None where not sharded.
        time_dim: which dimension is time.
        axis_kind: stamped (int64 ns since 1970), elapsed (float64 s) or counted (no coordinate).
        attrs: CF attributes of the array (units, long_name ...).
        coords: channel coordinates: dimensions, values, attributes. The time coordinate is
            made from ``axis_kind`` and filled with the units.
        digest: of what the result's numbers depend on.
        facts: the record of taps, transform length, hop, delay, bounds ...
        coefficients: kept as arrays and used again on later runs.
    """

    name: str
    dims: tuple[str, ...]
    shape: tuple[int, ...]
    dtype: str
    chunks: tuple[int, ...]
    shards: tuple[int, ...] | None
    time_dim: int
    axis_kind: AxisKind
    attrs: Mapping[str, Json]
    coords: Mapping[str, Coordinate]
    digest: str
    facts: Mapping[str, Json] = field(default_factory=dict)
    coefficients: Mapping[str, NDArray[Any]] = field(default_factory=dict)

    @property
    def unit(self) -> tuple[int, ...]:
        """The shape of a storage unit: what one file holds."""
        return self.shards or self.chunks


@dataclass(frozen=True)
class ResultState:
    """A result as the product holds it.

    Attributes:
        dims, shape, dtype, chunks, shards, time_dim, axis_kind: as in ResultPlan, as stored.
        digest: of what its numbers depend on.
        state: growing or ended.
        published_until: as stored: an ISO time, seconds, a number of samples, or None.
        facts: the record that was stored with it.
    """

    name: str
    dims: tuple[str, ...]
    shape: tuple[int, ...]
    dtype: str
    chunks: tuple[int, ...]
    shards: tuple[int, ...] | None
    time_dim: int
    axis_kind: AxisKind
    digest: str
    state: Literal["growing", "ended"]
    published_until: Json
    facts: Mapping[str, Json]

    @property
    def unit(self) -> tuple[int, ...]:
        """The shape of a storage unit: what one file holds."""
        return self.shards or self.chunks


@dataclass(frozen=True)
class ProductState:
    """What lies at a product's path.

    Attributes:
        kind: absent (nothing, or a creation that had not got as far as one result) or ours.
        spec_text, source_identity, results: as stored; empty where absent.
    """

    kind: Literal["absent", "ours"]
    spec_text: str = ""
    source_identity: Mapping[str, Json] = field(default_factory=dict)
    results: Mapping[str, ResultState] = field(default_factory=dict)
