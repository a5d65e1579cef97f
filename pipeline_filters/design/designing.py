"""One filter designed and held to what it claims."""

from __future__ import annotations

from fractions import Fraction

from pipeline_filters.design.compliance import check_bands
from pipeline_filters.design.contract import Response
from pipeline_filters.design.registry import METHODS
from pipeline_filters.design.verdicts import refuse_unmet
from pipeline_filters.spec.model import Filter, Timing


def design_filter(filter: Filter, rate_hz: Fraction, timing: Timing) -> Response:
    """The response of a filter at a rate, checked against all the bands it states.

    Under zero-phase timing the squared magnitude is judged.

    Raises:
        SpecError: settings that make no filter at this rate.
        ToleranceError: bands that are not met, each with what was reached.
    """
    response = METHODS[filter.method].design(filter, rate_hz, timing)
    findings = check_bands([response], filter.bands, float(rate_hz), timing == "zero-phase")
    if not all(finding.complies for finding in findings):
        refuse_unmet(filter, findings)
    return response
