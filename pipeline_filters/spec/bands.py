"""Bands and frequencies of a spec: rising, apart, possible, and below half the sample rate.

All of it works on the tree and passes over what is not readable, so that one fault does not
hide another.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterator
from dataclasses import dataclass
from fractions import Fraction

from pipeline_filters.spec.findings import Findings
from pipeline_filters.spec.quantities import decibels, frequency_hz, positive_frequency_hz
from pipeline_filters.spec.tree import Node


@dataclass(frozen=True)
class Rate:
    """A signal's sample rate, exact, and as the spec writes it."""

    signal: str
    hz: Fraction
    text: str

    @property
    def half_hz(self) -> Fraction:
        """The highest frequency that samples at this rate can hold."""
        return self.hz / 2

    def __str__(self) -> str:
        return f"half the sample rate of signal {self.signal} ({self.text}), {hertz(self.half_hz)}"


def hertz(freq_hz: Fraction) -> str:
    """A frequency for people; slow ones as a count a day."""
    if 0 < freq_hz < Fraction(1, 1000):
        return f"{float(freq_hz * 86400):.6g} / day"
    return f"{float(freq_hz):.6g} Hz"


def check_bands(node: Node, need_room: bool, findings: Findings) -> None:
    """What a list of bands must be at any rate.

    Args:
        node: the list.
        need_room: whether neighbours may not even touch, as in a design that they drive.
    """
    extents: list[tuple[Fraction, Fraction | None, Node]] = []
    for item in node.items:
        _check_tolerance(item, findings)
        low_node, high_node = item.get("from"), item.get("to")
        low_hz = low_node.quantity(frequency_hz) if low_node else Fraction(0)
        high_hz = high_node.quantity(frequency_hz) if high_node else None
        if low_hz is None or (high_node is not None and high_hz is None):
            continue
        if high_hz is None or low_hz < high_hz:
            extents.append((low_hz, high_hz, item))
            continue
        findings.add(
            (low_node or high_node or item).place,
            f"a band {_extent(item)}",
            "from below to; without from a band begins at 0 Hz",
            "exchange the edges" if low_hz > high_hz else "state two different edges",
        )
    extents.sort(key=lambda extent: extent[0])
    for (_, top_hz, lower), (bottom_hz, _, upper) in itertools.pairwise(extents):
        if top_hz is None or top_hz > bottom_hz:
            findings.add(
                upper.place,
                f"a band {_extent(upper)} that overlaps the one {_extent(lower)}",
                "bands that do not overlap",
                "move the edges apart",
            )
        elif need_room and top_hz == bottom_hz:
            findings.add(
                upper.place,
                f"a band {_extent(upper)} that touches the one {_extent(lower)}",
                "room between the bands that drive a design, in which nothing is asked",
                "move the edges apart",
            )


def _extent(item: Node) -> str:
    """A band's edges as written."""
    edges = [f"{key} {item.word(key)}" for key in ("from", "to") if key in item.entries]
    return " ".join(edges) or "over all frequencies"


def _check_tolerance(item: Node, findings: Findings) -> None:
    node, gain = item.get("tolerance"), item.number("gain")
    if node is None or gain is None:
        return
    in_decibels = isinstance(node.value, str)
    tolerance = node.quantity(decibels) if in_decibels else item.number("tolerance")
    if tolerance is None:
        return
    opposite = f"write {-tolerance:g}{' dB' if in_decibels else ''} if that is meant"
    if gain == 0 and in_decibels and tolerance >= 0:
        findings.add(
            node.place,
            f"tolerance: {node.text} for gain 0",
            "a negative level: the highest that is left, such as -60 dB",
            opposite if tolerance else "",
        )
    elif tolerance <= 0 and (gain > 0 or not in_decibels):
        if gain == 0:
            opposite = f"write {node.text} dB if that is meant"
        findings.add(
            node.place,
            f"tolerance: {node.text} for gain {gain:g}",
            "above 0: how far the magnitude may be from the gain",
            opposite if tolerance else "",
        )


def check_frequencies(node: Node, rate: Rate, findings: Findings) -> None:
    """Every frequency of a filter, or of a result's bands, against half the sample rate.

    Args:
        node: the filter or the result.
        rate: of a signal that it is used with.
    """
    for stated, key, may_touch in _frequencies(node):
        freq_hz = stated.quantity(frequency_hz)
        if freq_hz is None or freq_hz < rate.half_hz or (may_touch and freq_hz == rate.half_hz):
            continue
        findings.add(
            stated.place,
            f"{key}: {stated.text}",
            f"{'up to' if may_touch else 'below'} {rate}",
            "leave it out where the band has no upper edge"
            if key == "to"
            else "state a lower frequency",
        )
    centre, width = node.get("centre"), node.get("width")
    if centre is not None and width is not None:
        _check_notch(centre, width, rate, findings)


def _frequencies(node: Node) -> Iterator[tuple[Node, str, bool]]:
    """Each stated frequency: its node, its key, and whether it may be half the rate."""
    bands, corners, centre = node.get("bands"), node.get("corners"), node.get("centre")
    for band in bands.items if bands is not None else []:
        for key in ("from", "to"):
            if key in band.entries:
                yield band.entries[key], key, key == "to"
    for item in corners.items if corners is not None else []:
        yield item, "corners", False
    if centre is not None:
        yield centre, "centre", False


def _check_notch(centre: Node, width: Node, rate: Rate, findings: Findings) -> None:
    """A notch's half-power points must lie between 0 and half the rate."""
    centre_hz = centre.quantity(positive_frequency_hz)
    width_hz = width.quantity(positive_frequency_hz)
    if centre_hz is None or width_hz is None:
        return
    room_hz = 2 * min(centre_hz, rate.half_hz - centre_hz)
    if 0 < room_hz <= width_hz:
        findings.add(
            width.place,
            f"width: {width.text} about {centre.text}",
            f"half-power points above 0 and below {rate}",
            f"state less than {hertz(room_hz)}",
        )
