"""What designers share about bands: order, completeness, and what to say when unmet."""

from __future__ import annotations

import itertools
from collections.abc import Sequence
from typing import NoReturn

from pipeline_filters.design.compliance import BandFinding
from pipeline_filters.errors import Problem, SpecError, ToleranceError
from pipeline_filters.spec.model import Band, Filter


def bands_of(filter: Filter, least: int = 1) -> tuple[Band, ...]:
    """The bands that drive a design.

    Raises:
        SpecError: fewer than ``least``.
    """
    if len(filter.bands) < least:
        raise SpecError(
            Problem(
                filter.place("bands"),
                f"{len(filter.bands)} bands for method {filter.method}",
                f"at least {least}, with room between them",
                "state what must pass and what must not",
            )
        )
    return filter.bands


def sorted_bands(bands: Sequence[Band], filter: Filter, rate_hz: float) -> list[Band]:
    """Bands in rising order, with room between any two.

    Raises:
        SpecError: bands that meet or cross, or an edge past half the rate.
    """
    ordered = sorted(bands, key=lambda band: band.low_hz)
    problems = []
    for band in ordered:
        top = rate_hz / 2 if band.high_hz is None else band.high_hz
        if not band.low_hz < top <= rate_hz / 2:
            problems.append(
                Problem(
                    str(band.place or filter.place("bands")),
                    f"a band from {band.low_hz:g} to {top:g} Hz at a sample rate of {rate_hz:g} Hz",
                    f"rising edges up to {rate_hz / 2:g} Hz",
                    "lower the edges",
                )
            )
    for lower, upper in itertools.pairwise(ordered):
        if lower.high_hz is None or lower.high_hz >= upper.low_hz:
            problems.append(
                Problem(
                    str(upper.place or filter.place("bands")),
                    f"a band from {upper.low_hz:g} Hz that meets the one below it",
                    "room between neighbouring bands, in which nothing is asked",
                    "move the edges apart",
                )
            )
    if problems:
        raise SpecError(*problems)
    return ordered


def describe(finding: BandFinding) -> str:
    """What a band asked and what was reached, for people."""
    unit = " dB" if finding.band.decibels else ""
    top = "half the rate" if finding.band.high_hz is None else f"{finding.band.high_hz:g} Hz"
    return (
        f"in the band {finding.band.low_hz:g} Hz to {top} (gain {finding.band.gain:g}) "
        f"{finding.deviation:.4g}{unit} is reached, at {finding.worst_hz:.6g} Hz"
    )


def refuse_unmet(
    filter: Filter, findings: Sequence[BandFinding], limit: str | None = None
) -> NoReturn:
    """Says of every unmet band how near the design came.

    Raises:
        ToleranceError: always.
    """
    raise ToleranceError(
        *(
            Problem(
                str(finding.band.place or filter.place("bands")),
                f"filter {filter.name} ({filter.method})"
                + (f" with up to {limit}" if limit else "")
                + f": {describe(finding)}",
                f"{finding.limit:g}{' dB' if finding.band.decibels else ''} is allowed",
                "widen the tolerance or the room between bands",
            )
            for finding in findings
            if not finding.complies
        )
    )
