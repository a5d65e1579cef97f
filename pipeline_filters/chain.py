"""One result's chain: responses, timing and ends become stages with reach and blocks."""

from __future__ import annotations

from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass, replace
from fractions import Fraction
from math import ceil, floor, log2
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pipeline_filters.design.compliance import BandFinding, check_bands
from pipeline_filters.design.contract import Response, SectionsResponse, TapsResponse
from pipeline_filters.design.designing import checked_filter
from pipeline_filters.design.impulse import settling_samples
from pipeline_filters.design.merging import AT_REST, convolve_taps, two_sided
from pipeline_filters.errors import Problem, SpecError, ToleranceError
from pipeline_filters.layout import TapsReach
from pipeline_filters.spec.model import Amount, Band, Blocks, Ends, Precision, Result, Spec, Timing

# The largest error seen of a block's results, over eps * log2(N) * |x| * |h|, was 0.13.
ROUNDING_FACTOR = 0.25


@dataclass(frozen=True, eq=False)
class TapsStage:
    """A run of taps: one response, applied by overlap-add (or summed directly at hop 1).

    Attributes:
        taps: shape (P,), float64; y[n] = sum of taps[k] * x[n + lead - k].
        lead: samples a result looks ahead.
        support_before, support_after: samples before and after a result's own that its
            value counts as depending on: missing samples and blank ends follow them.
        line: how far a stand-in for a missing sample looks for its neighbours; 0: not.
        hop, transform: the block rule B and N.
    """

    taps: NDArray[np.float64]
    lead: int
    support_before: int
    support_after: int
    line: int
    hop: int
    transform: int


@dataclass(frozen=True, eq=False)
class RecursionStage:
    """Second-order sections run forward in time.

    Attributes:
        sections: shape (S, 6), float64.
        rest: samples of extension before a start, after which rest is reached.
        settle: results marked missing after a restart.
    """

    sections: NDArray[np.float64]
    rest: int
    settle: int


Stage = TapsStage | RecursionStage


@dataclass(frozen=True, eq=False)
class Chain:
    """All that a result's numbers depend on besides the samples.

    Attributes:
        notes: facts about the designs, for people.
        findings: what was found in the bands that the result states.
        filter_findings: what was found in the bands of each filter.
    """

    stages: tuple[Stage, ...]
    rate_hz: Fraction
    timing: Timing
    ends: Ends
    precision: Precision
    bridge: int
    delay_samples: Fraction | None
    notes: tuple[str, ...] = ()
    findings: tuple[BandFinding, ...] = ()
    filter_findings: tuple[tuple[str, tuple[BandFinding, ...]], ...] = ()

    @property
    def dtype(self) -> np.dtype[Any]:
        """The working precision."""
        return np.dtype(self.precision)

    @property
    def line(self) -> int:
        """How far stand-ins of the first stage's input look for neighbours."""
        first = self.stages[0]
        return first.line if isinstance(first, TapsStage) else 0

    @property
    def independent(self) -> bool:
        """Whether results may be computed from any start, warmed up over the block reach."""
        return len(self.stages) == 1 and isinstance(self.stages[0], TapsStage)

    @property
    def half_sample(self) -> bool:
        """Whether results are stamped half a sample later than their inputs."""
        first = self.stages[0]
        return (
            self.timing == "aligned" and isinstance(first, TapsStage) and first.taps.size % 2 == 0
        )

    @property
    def look_ahead(self) -> int:
        """Samples that the filling of missing ones may wait for."""
        return max(self.bridge + 1 if self.bridge else 0, self.line)

    def reach(self) -> TapsReach:
        """The reach of an independent chain's results.

        Raises:
            ValueError: the chain holds a recursion, which reaches back without bound.
        """
        if not self.independent:
            raise ValueError("a chain with a recursion has no bounded reach")
        stage = self.stages[0]
        assert isinstance(stage, TapsStage)
        look_back = max(self.bridge + 1 if self.bridge else 0, self.line + 1 if self.line else 0)
        return TapsReach(stage.hop, stage.taps.size, stage.lead, look_back, self.look_ahead)

    @property
    def hold_back(self) -> int:
        """Samples after a result's own that must have come before it is published, at most.

        Where ends are mirrored, a start waits for the samples that its extension mirrors.
        """
        mirrored = self.ends in ("even", "odd")
        held = self.look_ahead
        for stage in self.stages:
            if isinstance(stage, TapsStage):
                before = stage.taps.size - 1 - stage.lead
                held += max(stage.lead + stage.hop - 1, before if mirrored else 0)
            else:
                held += stage.rest if mirrored else 0
        return held

    @property
    def support(self) -> tuple[int | None, int]:
        """Samples before (None: without bound) and after a result that its value depends on."""
        before: int | None = 0
        after = 0
        for stage in self.stages:
            if isinstance(stage, TapsStage):
                before = None if before is None else before + stage.support_before
                after += stage.support_after
            else:
                before = None
        return before, after

    def rounding_bound(self) -> float | None:
        """The bound on a result's error per |x|_2 of a block: c * eps * log2(N) * |h|_2.

        None for a chain that is not one run of taps.
        """
        if not self.independent:
            return None
        stage = self.stages[0]
        assert isinstance(stage, TapsStage)
        eps = float(np.finfo(self.dtype).eps)
        return ROUNDING_FACTOR * eps * log2(stage.transform) * float(np.linalg.norm(stage.taps))

    def to_store(self) -> tuple[dict[str, Any], dict[str, NDArray[np.float64]]]:
        """The chain as JSON facts and arrays, from which `from_store` makes it again."""
        arrays: dict[str, NDArray[np.float64]] = {}
        stages: list[dict[str, Any]] = []
        for index, stage in enumerate(self.stages):
            facts = dict(vars(stage))
            kind = "taps" if isinstance(stage, TapsStage) else "sections"
            arrays[f"{index}_{kind}"] = facts.pop(kind)
            stages.append({"kind": kind, **facts})
        return {
            "stages": stages,
            "rate_hz": str(self.rate_hz),
            "timing": self.timing,
            "ends": self.ends,
            "precision": self.precision,
            "bridge": self.bridge,
            "delay_samples": None if self.delay_samples is None else str(self.delay_samples),
            "notes": list(self.notes),
        }, arrays

    @classmethod
    def from_store(cls, facts: Mapping[str, Any], arrays: Mapping[str, NDArray[Any]]) -> Chain:
        """The chain that `to_store` wrote down."""
        stages: list[Stage] = []
        for index, entry in enumerate(facts["stages"]):
            rest = {key: value for key, value in entry.items() if key != "kind"}
            numbers = np.asarray(arrays[f"{index}_{entry['kind']}"], np.float64)
            if entry["kind"] == "taps":
                stages.append(TapsStage(taps=numbers, **rest))
            else:
                stages.append(RecursionStage(sections=numbers, **rest))
        delay = facts["delay_samples"]
        return cls(
            tuple(stages),
            Fraction(facts["rate_hz"]),
            facts["timing"],
            facts["ends"],
            facts["precision"],
            facts["bridge"],
            None if delay is None else Fraction(delay),
            tuple(facts["notes"]),
        )


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
    notes = tuple(note for response in responses for note in response.notes)
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


def _transform_at_least(least: int) -> int:
    """The smallest of 2^k and 3 * 2^k that is at least ``least``."""
    power = 1 << max(0, (least - 1).bit_length())
    three = 3 * (power >> 2)
    return three if three >= least else power


def block_rule(
    taps: int, blocks: Blocks, rate_hz: Fraction, *, waiting: int, result: str
) -> tuple[int, int]:
    """The hop B and the transform length N of a run of ``taps`` taps.

    N is the smallest of 2^k and 3 * 2^k that is at least B + P - 1 for a stated hop, or at
    least max(8P, 1024) for auto (2P where 8P would pass 2^20); then B = N - P + 1. A
    latency caps B so that a result waits no longer than it.

    Args:
        waiting: samples a result waits for besides its block (lead, filling of missing).

    Raises:
        SpecError: the hop is not a whole number of samples, or the latency is too short.
    """
    where = str(blocks.place or "blocks")
    if blocks.hop is not None:
        hop = blocks.hop.in_samples(rate_hz)
        if hop.denominator != 1 or hop < 1:
            raise SpecError(
                Problem(
                    where,
                    f"hop: {blocks.hop.text} is {float(hop):g} samples for result {result}",
                    "a hop is a whole number of samples, at least 1",
                    f"state {max(1, round(hop))} samples",
                )
            )
        return int(hop), _transform_at_least(int(hop) + taps - 1)
    transform = _transform_at_least(2 * taps if 8 * taps > 1 << 20 else max(8 * taps, 1024))
    hop_auto = transform - taps + 1
    if blocks.latency is None:
        return hop_auto, transform
    allowed = floor(blocks.latency.in_samples(rate_hz)) - waiting + 1
    if allowed < 1:
        least = ceil(waiting / rate_hz * 1000) / 1000
        raise SpecError(
            Problem(
                where,
                f"latency: {blocks.latency.text}, but result {result} waits for {waiting} samples "
                "whatever its blocks",
                f"at least {least:g} s for this chain",
                "allow more latency, or use causal timing or shorter taps",
            )
        )
    hop_capped = min(hop_auto, allowed)
    return hop_capped, min(transform, _transform_at_least(hop_capped + taps - 1))


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
