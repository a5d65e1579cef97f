"""What is said of bands that a filter does not meet: how near it came, in each."""

from __future__ import annotations

from collections.abc import Sequence

from pipeline_filters.design.compliance import BandFinding
from pipeline_filters.errors import Problem, ToleranceError
from pipeline_filters.spec.model import Filter


def describe_band(finding: BandFinding) -> str:
    """The band in words, with the gain it asks for."""
    band = finding.band
    top = "half the rate" if band.high_hz is None else f"{band.high_hz:.10g} Hz"
    return f"the band from {band.low_hz:.10g} Hz to {top} (gain {band.gain:.6g})"


def unmet(
    filter: Filter,
    findings: Sequence[BandFinding],
    *,
    squared: bool,
    within: str = "",
    remedy: str = "widen the tolerance, or the room between the bands",
) -> ToleranceError:
    """A refusal that lists each unmet band, what it allows and what was reached.

    Args:
        filter: whose bands they are.
        findings: of all bands; those that comply are passed over.
        squared: the square of the magnitude was judged.
        within: the limit within which a design was sought, such as "4,000 taps".
        remedy: the one thing to do.
    """
    who = f"filter {filter.name} ({filter.method})" + (f", up to {within}," if within else "")
    how = " run forward and backward" if squared else ""
    return ToleranceError(
        *(
            Problem(
                str(finding.band.place or filter.place("bands")),
                f"{who}{how} misses {describe_band(finding)}: "
                f"{_reached(finding)} at {finding.worst_hz:.8g} Hz",
                f"{finding.limit:.10g}{_unit(finding)} is allowed",
                remedy,
            )
            for finding in findings
            if not finding.complies
        )
    )


def _unit(finding: BandFinding) -> str:
    return " dB" if finding.band.decibels else ""


def _reached(finding: BandFinding) -> str:
    # As many digits as it takes to tell the figure from the limit.
    digits = next(
        (d for d in range(4, 16) if float(f"{finding.deviation:.{d}g}") > finding.limit), 17
    )
    level = "level" if finding.band.decibels and finding.band.gain == 0 else "deviation"
    return f"a {level} of {finding.deviation:.{digits}g}{_unit(finding)} is reached"
