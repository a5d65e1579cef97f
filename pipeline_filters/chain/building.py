"""From responses, timing and ends to a chain, which is held to what it promises."""

from __future__ import annotations

from collections.abc import Collection, Sequence
from dataclasses import replace
from fractions import Fraction
from math import floor

import numpy as np
from numpy.typing import NDArray

from pipeline_filters.chain.blocks import block_rule
from pipeline_filters.chain.model import Chain, RecursionStage, Stage, TapsStage
from pipeline_filters.design.compliance import BandFinding, check_bands
from pipeline_filters.design.contract import Response, SectionsResponse, TapsResponse
from pipeline_filters.design.designing import checked_filter
from pipeline_filters.design.impulse import settling_samples
from pipeline_filters.design.merging import AT_REST, convolve_taps, two_sided
from pipeline_filters.errors import Problem, SpecError, ToleranceError
from pipeline_filters.spec.model import Amount, Band, Result, Spec, Timing


def design_chains(spec: Spec, names: Collection[str] | None = None) -> dict[str, Chain]:
    """Designs the chains of results and checks what they promise.

    Args:
        names: of the results; all where None.

    Raises:
        SpecError, ToleranceError: with every problem of every result.
    """
    designed: dict[tuple[str, Fraction, bool], tuple[Response, tuple[BandFinding, ...]]] = {}
    chains: dict[str, Chain] = {}
    refused: list[Problem] = []
    missed: list[Problem] = []
    for name, result in spec.results.items():
        if names is not None and name not in names:
            continue
        rate_hz = spec.signals[result.signal].rate_hz
        parts = []
        for filter_name in result.through:
            key = filter_name, rate_hz, result.timing == "zero-phase"
            try:
                if key not in designed:
                    filter = spec.filters[filter_name]
                    designed[key] = checked_filter(filter, rate_hz, result.timing)
                parts.append(designed[key])
            except SpecError as error:
                refused += error.problems
            except ToleranceError as error:
                missed += error.problems
        if len(parts) < len(result.through):
            continue
        try:
            chain = build_chain(spec, result, [response for response, _ in parts])
            by_filter = zip(result.through, (found for _, found in parts), strict=True)
            chains[name] = replace(chain, filter_findings=tuple(by_filter))
        except SpecError as error:
            refused += error.problems
        except ToleranceError as error:
            missed += error.problems
    if refused:
        raise SpecError(*dict.fromkeys(refused + missed))
    if missed:
        raise ToleranceError(*dict.fromkeys(missed))
    return chains


def build_chain(spec: Spec, result: Result, responses: Sequence[Response]) -> Chain:
    """One result's chain from its designed responses, in order.

    Raises:
        SpecError: the timing or the latency cannot be kept.
        ToleranceError: the whole chain misses the bands that the result states.
    """
    signal = spec.signals[result.signal]
    bridge = _bridge_samples(signal.missing.bridge, signal.rate_hz, signal.place)
    may_miss = signal.missing.policy != "refuse"
    parts = _timed_parts(result, responses)
    stages: list[Stage] = []
    for part in parts:
        if isinstance(part, RecursionStage):
            stages.append(part)
            continue
        taps, lead, before, after = part
        bounded = before + after + 1 < taps.size
        line = taps.size if bounded and may_miss else 0
        ahead = max(bridge + 1 if bridge else 0, line)
        hop, transform = block_rule(
            taps.size, spec.blocks, signal.rate_hz, waiting=lead + ahead, result=result.name
        )
        stages.append(TapsStage(taps, lead, before, after, line, hop, transform))
    findings = _check_result_bands(result, responses, signal.rate_hz)
    notes = tuple(
        f"{name}, {note}"
        for name, response in zip(result.through, responses, strict=True)
        for note in response.notes
    )
    return Chain(
        tuple(stages),
        signal.rate_hz,
        result.timing,
        result.ends,
        spec.blocks.precision,
        bridge,
        _delay(result.timing, responses),
        notes,
        findings,
    )


_Taps = tuple[NDArray[np.float64], int, int, int]


def _timed_parts(result: Result, responses: Sequence[Response]) -> list[_Taps | RecursionStage]:
    """Neighbouring taps merged, with lead and support as the timing has it."""
    if result.timing == "zero-phase":
        taps, half = np.ones(1), 0
        for response in responses:
            two, support = two_sided(response)
            taps, half = convolve_taps(taps, two), half + support
        return [(taps, (taps.size - 1) // 2, half, half)]
    if result.timing == "aligned":
        _refuse_unaligned(result, responses)
    parts: list[_Taps | RecursionStage] = []
    for response in responses:
        if isinstance(response, SectionsResponse):
            rest = settling_samples(response.sections, AT_REST)
            settle = settling_samples(response.sections, response.settle)
            parts.append(RecursionStage(response.sections, rest, settle))
            continue
        taps = response.taps
        if parts and not isinstance(parts[-1], RecursionStage):
            last = parts.pop()
            assert isinstance(last, tuple)
            taps = convolve_taps(last[0], taps)
        lead = taps.size // 2 if result.timing == "aligned" else 0
        parts.append((taps, lead, taps.size - 1 - lead, lead))
    return parts


def _refuse_unaligned(result: Result, responses: Sequence[Response]) -> None:
    problems = [
        Problem(
            f"{result.place or result.name}",
            f"timing aligned, but filter {name} "
            + ("is a recursion" if isinstance(response, SectionsResponse) else "has uneven taps"),
            "aligned needs a constant delay, which only linear-phase taps have",
            "state timing: causal or zero-phase, or use a filter of linear-phase taps",
        )
        for name, response in zip(result.through, responses, strict=True)
        if isinstance(response, SectionsResponse) or not response.linear_phase
    ]
    if problems:
        raise SpecError(*problems)


def _delay(timing: Timing, responses: Sequence[Response]) -> Fraction | None:
    """The constant delay of the results in samples; None where it varies with frequency."""
    if timing != "causal":
        return Fraction(0)
    total = Fraction(0)
    for response in responses:
        if not isinstance(response, TapsResponse) or not response.linear_phase:
            return None
        total += Fraction(response.taps.size - 1, 2)
    return total


def _bridge_samples(bridge: Amount | None, rate_hz: Fraction, place: object) -> int:
    if bridge is None:
        return 0
    samples = bridge.in_samples(rate_hz)
    if samples.denominator != 1:
        raise SpecError(
            Problem(
                str(place),
                f"missing: bridge: {bridge.text} is {float(samples):g} samples",
                "a bridge is a whole number of samples",
                f"state {floor(samples)} samples",
            )
        )
    return int(samples)


def _check_result_bands(
    result: Result, responses: Sequence[Response], rate_hz: Fraction
) -> tuple[BandFinding, ...]:
    if not result.bands:
        return ()
    squared = result.timing == "zero-phase"
    findings = check_bands(responses, result.bands, float(rate_hz), squared)
    missed = [finding for finding in findings if not finding.complies]
    if missed:
        raise ToleranceError(*(_missed(result, finding) for finding in missed))
    return findings


def _missed(result: Result, finding: BandFinding) -> Problem:
    band: Band = finding.band
    unit = " dB" if band.decibels else ""
    return Problem(
        str(band.place or result.name),
        f"result {result.name}: the whole chain reaches {finding.deviation:.4g}{unit} at "
        f"{finding.worst_hz:.6g} Hz",
        f"the band allows {finding.limit:.4g}{unit}",
        "tighten the filters of the chain, or widen the tolerance",
    )
