"""A digest over what a result's numbers depend on, and over nothing else.

So a change of title, notes, chunks, names, formatting, of the spelling of a unit or of another
result does not touch it.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from fractions import Fraction
from typing import Any

from pipeline_filters.spec.model import Amount, Band, Blocks, Filter, Signal, Spec

# Changed when the same spec comes to mean other numbers.
MEANING = 1


def result_digest(spec: Spec, result_name: str) -> str:
    """SHA-256 in hexadecimal over the canonical JSON of ``result_facts``.

    Raises:
        KeyError: the spec has no such result.
    """
    facts = result_facts(spec, result_name)
    text = json.dumps(facts, sort_keys=True, separators=(",", ":"), allow_nan=False)
    return hashlib.sha256(text.encode()).hexdigest()


def result_facts(spec: Spec, result_name: str) -> dict[str, Any]:
    """What a result's numbers depend on, as JSON values.

    Frequencies are fractions of Hz and lengths fractions of samples, so that ``1 kHz`` and
    ``1000 Hz``, or ``5 samples`` and ``5 ms`` at that rate, are the same. What merely decides
    whether a source is refused (its unit, the tolerance of its rate) is left out.

    Raises:
        KeyError: the spec has no such result.
    """
    result = spec.results[result_name]
    signal = spec.signals[result.signal]
    return {
        "meaning": MEANING,
        "signal": _signal_facts(signal),
        "chain": [_filter_facts(spec.filters[name], signal.rate_hz) for name in result.through],
        "timing": result.timing,
        "ends": result.ends,
        "bands": _bands_facts(result.bands),
        "keep_as": result.keep_as,
        "blocks": _blocks_facts(spec.blocks, signal.rate_hz),
    }


def _signal_facts(signal: Signal) -> Mapping[str, Any]:
    channels = signal.channels
    bridge = signal.missing.bridge
    return {
        "variable": signal.variable,
        "time": signal.time,
        "rate_hz": str(signal.rate_hz),
        "channels": None if channels is None else [channels.dimension, list(channels.keep)],
        "breaks": signal.breaks,
        "missing": signal.missing.policy,
        "bridge_samples": None if bridge is None else str(bridge.in_samples(signal.rate_hz)),
        "infinite": signal.infinite,
    }


def _filter_facts(filter: Filter, rate_hz: Fraction) -> Mapping[str, Any]:
    return {
        "method": filter.method,
        "settings": {
            key: _canonical(value, rate_hz)
            for key, value in filter.settings.items()
            # The digest of a file of taps: the taps themselves are what counts.
            if key != "sha256"
        },
        "bands": _bands_facts(filter.bands),
        "settle": filter.settle,
    }


def _blocks_facts(blocks: Blocks, rate_hz: Fraction) -> Mapping[str, Any]:
    hop, latency = blocks.hop, blocks.latency
    return {
        "hop_samples": None if hop is None else str(hop.in_samples(rate_hz)),
        "latency_samples": None if latency is None else str(latency.in_samples(rate_hz)),
        "precision": blocks.precision,
    }


def _bands_facts(bands: tuple[Band, ...]) -> list[list[Any]]:
    return [[b.low_hz, b.high_hz, b.gain, b.tolerance, b.decibels] for b in bands]


def _canonical(value: object, rate_hz: Fraction) -> Any:
    """A setting as a JSON value that is the same for the same meaning."""
    if isinstance(value, Fraction):
        return str(value)
    if isinstance(value, Amount):
        return str(value.in_samples(rate_hz))
    if isinstance(value, tuple):
        return [_canonical(item, rate_hz) for item in value]
    if isinstance(value, int) and not isinstance(value, bool):
        return float(value)  # 8 and 8.0 are one parameter of a window
    return value
