"""The explicit table of methods. Adding one: a designer, a row here, a schema entry."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from fractions import Fraction
from typing import Literal

from pipeline_filters.design.butterworth import design_butterworth
from pipeline_filters.design.contract import Response
from pipeline_filters.design.equiripple import design_equiripple
from pipeline_filters.design.given_taps import design_taps
from pipeline_filters.design.moving_average import design_moving_average
from pipeline_filters.design.notch import design_notch
from pipeline_filters.design.windowed import design_kaiser, design_window
from pipeline_filters.spec.model import Filter, Timing


@dataclass(frozen=True)
class Method:
    """One method of design.

    Attributes:
        name: the word for it in a spec.
        design: makes the response from a filter, the rate and the timing.
        keys: the settings that it takes in a spec, besides those of every method.
        runs_as: taps, or a recursion (two-sided taps under zero-phase timing).
        phase: linear by its making, tested for it (given taps, named windows), or nonlinear.
        bands: what bands are to it: they drive it, are a claim that is checked, or drive it
            where its other settings are left out.
    """

    name: str
    design: Callable[[Filter, Fraction, Timing], Response]
    keys: frozenset[str]
    runs_as: Literal["taps", "recursion"]
    phase: Literal["linear", "tested", "nonlinear"]
    bands: Literal["drive", "claim", "either"] = "claim"


def _table(*methods: Method) -> Mapping[str, Method]:
    return {method.name: method for method in methods}


METHODS: Mapping[str, Method] = _table(
    Method("taps", design_taps, frozenset({"taps", "file", "sha256"}), "taps", "tested"),
    Method("moving-average", design_moving_average, frozenset({"length"}), "taps", "linear"),
    Method(
        "window",
        design_window,
        frozenset({"window", "length", "shape", "corners"}),
        "taps",
        "tested",
    ),
    Method("kaiser", design_kaiser, frozenset(), "taps", "linear", "drive"),
    Method("equiripple", design_equiripple, frozenset(), "taps", "linear", "drive"),
    Method(
        "butterworth",
        design_butterworth,
        frozenset({"order", "shape", "corners"}),
        "recursion",
        "nonlinear",
        "either",
    ),
    Method("notch", design_notch, frozenset({"centre", "width"}), "recursion", "nonlinear"),
)
