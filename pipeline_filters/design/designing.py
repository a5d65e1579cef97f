"""One filter designed, and held to all the bands it states."""

from __future__ import annotations

from difflib import get_close_matches
from fractions import Fraction

from pipeline_filters.design.compliance import BandFinding, check_bands
from pipeline_filters.design.contract import Response
from pipeline_filters.design.registry import METHODS
from pipeline_filters.design.verdicts import unmet
from pipeline_filters.errors import Problem, SpecError
from pipeline_filters.spec.model import Filter, Timing


def design_filter(filter: Filter, rate_hz: Fraction, timing: Timing) -> Response:
    """The response alone of `checked_filter`.

    Raises:
        SpecError, ToleranceError: as there.
    """
    return checked_filter(filter, rate_hz, timing)[0]


def checked_filter(
    filter: Filter, rate_hz: Fraction, timing: Timing
) -> tuple[Response, tuple[BandFinding, ...]]:
    """The response of a filter at a rate, and what it reaches in the bands it states.

    Under zero-phase timing the squared magnitude is judged, and tolerance-driven designs
    aim at it: at the root of each gain, and half of each tolerance in dB.

    Args:
        filter: from a checked spec.
        rate_hz: samples a second, exact.
        timing: how the response will be run.

    Raises:
        SpecError: settings that make no filter at this rate, with every problem found.
        ToleranceError: bands that are not met, each with what was reached.
    """
    method = METHODS.get(filter.method)
    if method is None:
        near = get_close_matches(filter.method, METHODS, n=1)
        raise SpecError(
            Problem(
                filter.place("method"),
                f"method {filter.method}",
                "one of " + ", ".join(METHODS),
                f"did you mean {near[0]}?" if near else "state one of them",
            )
        )
    response = method.design(filter, rate_hz, timing)
    squared = timing == "zero-phase"
    findings = check_bands([response], filter.bands, float(rate_hz), squared)
    if not all(finding.complies for finding in findings):
        raise unmet(
            filter,
            findings,
            squared=squared,
            remedy="change the filter's settings, or the claim that the band makes",
        )
    return response, findings
