"""The explicit table of methods. Adding one: a designer, a row here, a schema entry."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from fractions import Fraction

from pipeline_filters.design.contract import Response
from pipeline_filters.design.equiripple import design_equiripple
from pipeline_filters.design.given import design_moving_average, design_taps
from pipeline_filters.design.recursions import design_butterworth, design_notch
from pipeline_filters.design.windowed import design_kaiser, design_window
from pipeline_filters.spec.model import Filter, Timing


@dataclass(frozen=True)
class Method:
    """One method of design.

    Attributes:
        design: makes the response from a filter's settings, the rate and the timing.
        runs_as: for people: as taps, or as a recursion.
        driven_by_bands: whether bands drive the design; elsewhere they are only a claim.
    """

    design: Callable[[Filter, Fraction, Timing], Response]
    runs_as: str
    driven_by_bands: bool = False


_RECURSION = "recursion; two-sided taps under zero-phase"

METHODS: Mapping[str, Method] = {
    "taps": Method(design_taps, "taps"),
    "moving-average": Method(design_moving_average, "taps"),
    "window": Method(design_window, "taps"),
    "kaiser": Method(design_kaiser, "taps", driven_by_bands=True),
    "equiripple": Method(design_equiripple, "taps", driven_by_bands=True),
    "butterworth": Method(design_butterworth, _RECURSION),
    "notch": Method(design_notch, _RECURSION),
}
