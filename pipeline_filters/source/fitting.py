"""Whether a variable of a source is what a signal of the spec says; all problems at once."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any, TypeVar

import numpy as np

from pipeline_filters.errors import Problem, SourceError
from pipeline_filters.source.cf_attributes import MARKERS, as_stored, build_decoding, fits, numbers
from pipeline_filters.source.cf_time import TimeUnitError, TimeUnits
from pipeline_filters.source.channels import channel_coords, keep_of, kept_coord, labels_of
from pipeline_filters.source.decoding import Decoding
from pipeline_filters.source.offers import Coordinate, Offer, Offers
from pipeline_filters.spec.findings import did_you_mean
from pipeline_filters.spec.model import Signal

_T = TypeVar("_T")
_SHOWN = 24


@dataclass(frozen=True, eq=False)
class Fit:
    """What a signal and its variable come to together; the fields are those of a
    `pipeline_filters.source.readers.SignalReader`, and those that tell where it lies."""

    offer: Offer
    time_offer: Offer | None
    time_units: TimeUnits | None
    signal: Signal
    dims: tuple[str, ...]
    shape: tuple[int, ...]
    time_dim: int
    dtype: np.dtype[Any]
    attrs: Mapping[str, Any]
    decoding: Decoding
    keep: tuple[tuple[int, ...] | None, ...]
    labels: tuple[tuple[str, ...] | None, ...]
    coords: Mapping[str, Coordinate]

    def reader_facts(self) -> dict[str, Any]:
        """The fields that a reader has as well."""
        own = ("offer", "time_offer", "time_units")
        return {key: value for key, value in vars(self).items() if key not in own}

    def clipped(self, sizes: tuple[int, ...]) -> tuple[int, ...]:
        """Chunk sizes, where chunks are larger than what is kept."""
        return tuple(min(size, n) for size, n in zip(sizes, self.shape, strict=True))


def fit_signal(offers: Offers, signal: Signal) -> Fit:
    """Fits a signal of the spec to its variable.

    Raises:
        SourceError: with every problem of this signal.
    """
    where = f"{offers.where}, variable {signal.variable}"
    offer = _variable(offers, signal, where)
    problems: list[Problem] = []
    named = _attempt(problems, lambda: _dimensions(offer, signal, where))
    decoding = _attempt(problems, lambda: build_decoding(offer.dtype, offer.attrs, signal, where))
    _attempt(problems, lambda: _check_unit(offer, signal, where))
    if named is None:
        raise SourceError(*problems)
    dims, time_dim = named
    stamps = _attempt(problems, lambda: _stamps(offers, signal, offer.shape[time_dim]))
    coords = _attempt(problems, lambda: channel_coords(offers, offer, dims, time_dim)) or {}
    keep = _attempt(problems, lambda: keep_of(signal, dims, time_dim, coords, where)) or {}
    if problems or decoding is None or stamps is None:
        raise SourceError(*problems)
    others = [dim for at, dim in enumerate(dims) if at != time_dim]
    return Fit(
        offer=offer,
        time_offer=stamps[0],
        time_units=stamps[1],
        signal=signal,
        dims=dims,
        shape=tuple(
            len(keep[d]) if d in keep else n for d, n in zip(dims, offer.shape, strict=True)
        ),
        time_dim=time_dim,
        dtype=offer.dtype,
        attrs=offer.attrs,
        decoding=decoding,
        keep=tuple(keep.get(dim) for dim in others),
        labels=tuple(labels_of(dim, coords, keep.get(dim)) for dim in others),
        coords={name: kept_coord(coord, keep) for name, coord in coords.items()},
    )


def fit_all(offers: Offers, signals: Mapping[str, Signal]) -> dict[str, Fit]:
    """Fits all signals of a spec.

    Raises:
        SourceError: with every problem of every signal, each told once.
    """
    problems: list[Problem] = []
    fits: dict[str, Fit] = {}
    for name, signal in signals.items():
        try:
            fits[name] = fit_signal(offers, signal)
        except SourceError as error:
            problems += error.problems
    if problems:
        raise SourceError(*dict.fromkeys(problems))
    return fits


def _attempt(problems: list[Problem], step: Callable[[], _T]) -> _T | None:
    try:
        return step()
    except SourceError as error:
        problems += error.problems
        return None


def _variable(offers: Offers, signal: Signal, where: str) -> Offer:
    offer = offers.find(signal.variable)
    if offer is None:
        names = offers.names()
        shown = ", ".join(names[:_SHOWN]) + (" ..." if len(names) > _SHOWN else "")
        raise SourceError(
            Problem(
                where,
                "no such variable",
                f"the source has {shown or 'no variables'}",
                did_you_mean(signal.variable, names, "name one of them under signals"),
            )
        )
    return offer


def _dimensions(offer: Offer, signal: Signal, where: str) -> tuple[tuple[str, ...], int]:
    dims = offer.dims
    if not dims and len(offer.shape) == 1:
        dims = (signal.time,)
    shown = ", ".join(dims)
    if signal.time in dims and len(set(dims)) == len(dims):
        if all(offer.shape):
            return dims, dims.index(signal.time)
        sizes = ", ".join(f"{dim} {n}" for dim, n in zip(dims, offer.shape, strict=True))
        told = (f"no samples ({sizes})", "at least one sample", "fill the source first")
    elif not offer.shape:
        told = ("a single value", "samples along a time dimension", "name another variable")
    elif not dims:
        told = (
            f"no dimension {signal.time}: its dimensions have no names",
            "dimension names (Zarr v3: dimension_names, v2: _ARRAY_DIMENSIONS)",
            "store its dimension names",
        )
    elif signal.time in dims:
        told = (f"dimensions {shown}", "a name of its own for each dimension", "rename them")
    else:
        remedy = did_you_mean(signal.time, dims, f"state time: for signal {signal.name}")
        told = (f"no dimension {signal.time}", f"its dimensions are {shown}", remedy)
    raise SourceError(Problem(where, *told))


def _check_unit(offer: Offer, signal: Signal, where: str) -> None:
    if signal.unit is None:
        return
    unit = offer.attrs.get("units")
    if unit is None:
        raise SourceError(
            Problem(
                where,
                "it states no unit",
                f"the spec states {signal.unit!r}",
                "set its units attribute, or state no unit in the spec",
            )
        )
    if " ".join(str(unit).split()) != " ".join(signal.unit.split()):
        raise SourceError(
            Problem(
                where,
                f"its unit is {unit!r}",
                f"the spec states {signal.unit!r}, to the letter",
                f"state unit: {unit}, or mend the source",
            )
        )


def _stamps(offers: Offers, signal: Signal, length: int) -> tuple[Offer | None, TimeUnits | None]:
    offer = offers.find(signal.time)
    if offer is None:
        return None, None
    where = f"{offers.where}, coordinate {signal.time}"
    along = offer.dims or (signal.time,)
    if offer.shape != (length,) or along != (signal.time,):
        raise SourceError(
            Problem(
                where,
                f"its shape is {offer.shape} along {', '.join(along)}",
                f"one stamp for each of {length} samples along {signal.time}",
                "mend the source, so that every sample has one stamp",
            )
        )
    packed = sorted({"scale_factor", "add_offset"} & offer.attrs.keys())
    if packed:
        raise SourceError(
            Problem(
                where,
                f"packed stamps ({', '.join(packed)})",
                "stamps as they are",
                "store the stamps without scale_factor and add_offset",
            )
        )
    return offer, _time_units(offer, where)


def _time_units(offer: Offer, where: str) -> TimeUnits:
    units = offer.attrs.get("units")
    try:
        if offer.dtype.kind in "mM":
            return TimeUnits.of_datetimes(offer.dtype)
        if offer.dtype.kind not in "iuf" or offer.dtype.itemsize > 8:
            raise TimeUnitError(
                f"stamps of type {offer.dtype}",
                "integers, float32 or float64 with a CF unit",
                "store the stamps as numbers with a CF unit",
            )
        if not isinstance(units, str):
            raise TimeUnitError(
                "stamps without a unit" if units is None else f"units {units!r}",
                "a CF unit, such as 'milliseconds since 1970-01-01' or 's'",
                "set the units attribute of the time coordinate",
            )
        parsed = TimeUnits.parse(units, str(offer.attrs.get("calendar", "standard")))
    except TimeUnitError as error:
        raise SourceError(Problem(where, error.found, error.allowed, error.remedy)) from None
    problems: list[Problem] = []
    markers = [
        as_stored(value, offer.dtype)
        for key in MARKERS
        if key in offer.attrs
        for value in numbers(offer.attrs[key], offer.dtype, f"{where}, attribute {key}", problems)
        if fits(value, offer.dtype)
    ]
    if problems:
        raise SourceError(*problems)
    return parsed.with_markers(tuple(dict.fromkeys(markers)))
