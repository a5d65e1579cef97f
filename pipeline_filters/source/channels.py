"""The channels of a signal: their coordinates, and which of them the spec keeps."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping
from typing import Any

import numpy as np

from pipeline_filters.errors import Problem, SourceError
from pipeline_filters.source.offers import Coordinate, Offer, Offers
from pipeline_filters.spec.findings import did_you_mean
from pipeline_filters.spec.model import Signal

_SHOWN = 24


def channel_coords(
    offers: Offers, offer: Offer, dims: tuple[str, ...], time_dim: int
) -> dict[str, Coordinate]:
    """The coordinates of a variable that lie along its channel dimensions only.

    These are the arrays named as its dimensions, and those that its ``coordinates``
    attribute, or the group's, lists.

    Raises:
        SourceError: a coordinate that cannot be read, or of another size than its dimensions.
    """
    sizes = dict(zip(dims, offer.shape, strict=True))
    along = set(dims) - {dims[time_dim]}
    listed = f"{offer.attrs.get('coordinates', '')} {offers.shared_coordinates()}".split()
    coords: dict[str, Coordinate] = {}
    for name in sorted({*along, *listed} - {offer.name, dims[time_dim]}):
        found = offers.find(name)
        if found is None or not found.dims or not set(found.dims) <= along:
            continue
        wanted = tuple(sizes[dim] for dim in found.dims)
        if found.shape != wanted:
            raise SourceError(
                Problem(
                    f"{offers.where}, coordinate {name}",
                    f"its shape is {found.shape}",
                    f"{wanted}, as variable {offer.name} is along {', '.join(found.dims)}",
                    f"mend coordinate {name}, or remove it",
                )
            )
        coords[name] = (found.dims, found.load(), found.attrs)
    return coords


def keep_of(
    signal: Signal,
    dims: tuple[str, ...],
    time_dim: int,
    coords: Mapping[str, Coordinate],
    where: str,
) -> dict[str, tuple[int, ...]]:
    """The positions that the spec keeps, along the dimension that it names; {} for all.

    Raises:
        SourceError: no such dimension, no labels, labels that are absent or not unique.
    """
    if signal.channels is None:
        return {}
    dim = signal.channels.dimension
    others = [name for at, name in enumerate(dims) if at != time_dim]
    if dim not in others:
        raise SourceError(
            Problem(
                where,
                f"no channel dimension {dim}",
                f"it has {', '.join(others) or 'none'}",
                did_you_mean(dim, others, "name one of them, or state no channels"),
            )
        )
    if dim not in coords or coords[dim][0] != (dim,):
        raise SourceError(
            Problem(
                where,
                f"dimension {dim} has no labels to keep by",
                f"a coordinate {dim} along it",
                "store the labels, or state no channels",
            )
        )
    labels = _texts(coords[dim][1])
    places = {label: at for at, label in enumerate(labels)}
    counts = Counter(labels)
    keep = [_text(label) for label in signal.channels.keep]
    problems = []
    for label in dict.fromkeys(keep):
        count = counts[label]
        if keep.count(label) > 1:
            problems.append(
                Problem(
                    where,
                    f"{dim} {label} is kept {keep.count(label)} times",
                    "each channel once",
                    f"state {label} once under keep",
                )
            )
        if count == 0:
            shown = ", ".join(labels[:_SHOWN]) + (" ..." if len(labels) > _SHOWN else "")
            remedy = did_you_mean(label, labels, "keep labels that the source has")
            problems.append(Problem(where, f"no {dim} {label}", f"it has {shown}", remedy))
        elif count > 1:
            problems.append(
                Problem(
                    where,
                    f"{count} times {dim} {label}",
                    "labels that tell channels apart",
                    f"mend the labels of {dim}",
                )
            )
    if problems:
        raise SourceError(*problems)
    return {dim: tuple(places[label] for label in keep)}


def labels_of(
    dim: str, coords: Mapping[str, Coordinate], kept: tuple[int, ...] | None
) -> tuple[str, ...] | None:
    """The labels of the kept channels; None for a dimension without labels."""
    if dim not in coords or coords[dim][0] != (dim,):
        return None
    labels = _texts(coords[dim][1])
    return tuple(labels if kept is None else [labels[at] for at in kept])


def kept_coord(coord: Coordinate, keep: Mapping[str, tuple[int, ...]]) -> Coordinate:
    """A coordinate at the kept channels."""
    along, values, attrs = coord
    for axis, dim in enumerate(along):
        if dim in keep:
            values = np.take(values, keep[dim], axis=axis)
    return along, values, attrs


def _texts(labels: Any) -> list[str]:
    values = np.asarray(labels)
    if values.dtype.kind == "f":
        values = values.astype(str).astype(np.float64)  # float32 0.1 is the spec's 0.1
    return [_text(label) for label in values.tolist()]


def _text(label: object) -> str:
    """One text for a label, whether a number stands in the spec as 3, 3.0 or "3"."""
    if isinstance(label, bytes):
        return label.decode("utf-8", "replace")
    if isinstance(label, float) and label.is_integer():
        return str(int(label))
    return str(label)
