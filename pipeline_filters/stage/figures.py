"""What is known of a result, as JSON: of its chain, of its run to come, of its run as it was."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction
from math import prod
from typing import TYPE_CHECKING, Any

from pipeline_filters.chain.model import Chain, TapsStage
from pipeline_filters.design.compliance import BandFinding
from pipeline_filters.layout import Span, decodings, without

if TYPE_CHECKING:
    from pipeline_filters.stage.compiling import CompiledResult

Figures = dict[str, Any]


def chain_figures(chain: Chain) -> Figures:
    """Taps, blocks, delay, reach and bands of a chain; nothing of a source."""
    reach = chain.reach().block_reach if chain.independent else None
    delay = chain.delay_samples
    return {
        "rate_hz": float(chain.rate_hz),
        "timing": chain.timing,
        "ends": chain.ends,
        "precision": chain.precision,
        "stages": [_stage(stage) for stage in chain.stages],
        "delay": None if delay is None else _amount(float(delay), chain.rate_hz),
        "stamped_half_a_sample_later": chain.half_sample,
        "support_before": _amount(chain.support[0], chain.rate_hz),
        "support_after": _amount(chain.support[1], chain.rate_hz),
        "block_reach_before": None if reach is None else _amount(reach[0], chain.rate_hz),
        "block_reach_after": None if reach is None else _amount(reach[1], chain.rate_hz),
        "hold_back": _amount(chain.hold_back, chain.rate_hz),
        "rounding_bound": chain.rounding_bound(),
        "bands": [
            *(_band(f"filter {name}", one) for name, them in chain.filter_findings for one in them),
            *(_band("the whole chain", one) for one in chain.findings),
        ],
        "notes": list(chain.notes),
    }


def _stage(stage: Any) -> Figures:
    if isinstance(stage, TapsStage):
        direct = stage.hop == 1
        return {
            "runs_as": "direct sum" if direct else "overlap-add",
            "taps": int(stage.taps.size),
            "transform_samples": None if direct else stage.transform,
            "hop_samples": stage.hop,
        }
    return {
        "runs_as": "recursion",
        "sections": int(stage.sections.shape[0]),
        "rest_samples": stage.rest,
        "settle_samples": stage.settle,
    }


def _amount(samples: float | None, rate_hz: Fraction) -> Figures | None:
    """A count of samples, in seconds too; None stands for one without bound."""
    if samples is None:
        return None
    return {"samples": samples, "seconds": float(samples / rate_hz)}


def _band(of: str, finding: BandFinding) -> Figures:
    band = finding.band
    return {
        "of": of,
        "low_hz": band.low_hz,
        "high_hz": band.high_hz,
        "gain": band.gain,
        "unit": "dB" if band.decibels else "linear",
        "limit": finding.limit,
        # A level of minus infinity is no number in JSON.
        "reached": max(finding.deviation, -9999.0),
        "worst_hz": finding.worst_hz,
    }


def layout_figures(compiled: CompiledResult, workers: int) -> Figures:
    """Stretches, spans, and how often each chunk of the source is decoded."""
    reader, grid = compiled.reader, compiled.grid
    spans = compiled.spans(workers)
    figures = {
        "samples": reader.length,
        "channels": prod(without(reader.shape, reader.time_dim)),
        "kept_as": compiled.dtype.name,
        "units": dict(zip(reader.dims, grid.unit, strict=True)),
        "stretches": int(compiled.stretches.starts.size),
        "drift_ppm": compiled.axis.drift_ppm,
        "spans": len(spans),
        "tasks": len(spans),
        "decodings_of_a_chunk": decodings_of(compiled, spans),
    }
    if grid.unit != (reader.shards or reader.chunks):
        # What it would be in a product of its own with the source's chunks.
        like_source = replace(compiled, result=replace(compiled.result, chunks=None), stored=None)
        figures["decodings_with_the_chunks_of_the_source"] = decodings_of(
            like_source, like_source.spans(workers)
        )
    return figures


def decodings_of(compiled: CompiledResult, spans: list[Span]) -> float:
    """How often the mean chunk of the source is decoded for this result.

    Reads of a span begin where its block reach does; along channels a chunk is decoded once
    for every group that holds some of it.
    """
    chain, grid, reader = compiled.chain, compiled.grid, compiled.reader
    if chain.independent:
        reach = chain.reach()
        box = spans[0].box
        edges = []
        for span in spans:
            if span.box != box:
                continue
            start, stop = span.indexes(grid)
            for stretch, low, high in compiled.stretches.within(start, stop):
                first = stretch.start + reach.first_offset(stretch, low, high)
                last = stretch.start + reach.last_offset(stretch, high)
                edges.append((first, last))
        along_time = decodings(edges, reader.chunk_samples, reader.length)[0]
    else:
        starts, lengths = compiled.stretches.starts.tolist(), compiled.stretches.lengths.tolist()
        whole = [(start, start + length) for start, length in zip(starts, lengths, strict=True)]
        along_time = decodings(whole, reader.chunk_samples, reader.length)[0]
    return along_time * across_channels(compiled)


def across_channels(compiled: CompiledResult) -> float:
    """Chunks touched by all groups of channels, over chunks there are."""
    chunks = without(compiled.reader.chunks, compiled.reader.time_dim)
    shape = without(compiled.reader.shape, compiled.reader.time_dim)
    touched = sum(
        prod(
            (part.stop - 1) // chunk - part.start // chunk + 1
            for part, chunk in zip(box, chunks, strict=True)
        )
        for box in compiled.boxes
    )
    there = prod(-(-n // chunk) for n, chunk in zip(shape, chunks, strict=True))
    return float(touched / there)
