"""What a spec's parts mean together: references, frequencies against rates, whole samples.

These checks need the spec alone. They work on the tree and pass over what is not readable, so
that everything that is wrong is told at once.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from math import floor
from pathlib import Path

from pipeline_filters.spec.bands import Rate, check_bands, check_frequencies
from pipeline_filters.spec.findings import Findings, did_you_mean, listed, nearest, shortened
from pipeline_filters.spec.model import Amount, Place
from pipeline_filters.spec.quantities import (
    duration_seconds,
    hop,
    length,
    positive_frequency_hz,
)
from pipeline_filters.spec.tree import Node

# Keys of a filter that are not settings of its method.
COMMON_KEYS = frozenset(("method", "notes", "bands", "settle"))


@dataclass(frozen=True)
class Meaning:
    """What the checks came by.

    Attributes:
        warnings: what is odd but not wrong, each with its place, in the order of the text.
        taps: of the filters whose taps lie in a file, by filter.
    """

    warnings: tuple[str, ...]
    taps: Mapping[str, tuple[float, ...]]


def check(root: Node, folder: Path | None, findings: Findings) -> Meaning:
    """Adds everything that is wrong with the parts together to ``findings``.

    Args:
        root: the whole tree.
        folder: where files that the spec names lie; None where it may name none.
    """
    signals, filters, results = (
        _Named.of(root.get(section)) for section in ("signals", "filters", "results")
    )
    rates = {name: rate for name, node in signals.nodes.items() if (rate := _rate(name, node))}
    taps: dict[str, tuple[float, ...]] = {}
    for name, node in signals.nodes.items():
        _check_signal(node, rates.get(name), findings)
    for name, node in filters.nodes.items():
        _check_filter(node, findings)
        loaded = _loaded_taps(node, folder, findings)
        if loaded is not None:
            taps[name] = loaded
    for name, node in results.nodes.items():
        _check_result(name, results.places[name], node, signals, filters, findings)
        rate = rates.get(node.word("from") or "")
        if rate is not None:
            check_frequencies(node, rate, findings)
    for rate, node in _uses(rates, filters, results):
        check_frequencies(node, rate, findings)
        _check_whole("length", node.get("length"), rate, findings)
    used = {node.word("from") for node in results.nodes.values()}
    _check_blocks(
        root.get("blocks"), [rate for name, rate in rates.items() if name in used], findings
    )
    return Meaning(tuple(_warnings(signals, filters, results)), taps)


@dataclass(frozen=True)
class _Named:
    """The parts of one section by name, and where their names stand."""

    nodes: Mapping[str, Node]
    places: Mapping[str, Place]

    @classmethod
    def of(cls, node: Node | None) -> _Named:
        return cls(node.entries, node.keys) if node is not None else cls({}, {})


def _rate(name: str, node: Node) -> Rate | None:
    """A signal's rate; None where it is not stated in one readable way."""
    stated, interval = node.get("sample_rate"), node.get("sample_interval")
    if stated is not None and interval is None:
        rate_hz = stated.quantity(positive_frequency_hz)
        return None if rate_hz is None else Rate(name, rate_hz, stated.text)
    if interval is not None and stated is None:
        seconds = interval.quantity(duration_seconds)
        return None if seconds is None else Rate(name, 1 / seconds, f"one in {interval.text}")
    return None


def _words(node: Node, key: str) -> list[Node]:
    """The items of a list that are text."""
    held = node.get(key)
    return [item for item in held.items if isinstance(item.value, str)] if held else []


def _dimensions(signal: Node) -> list[str]:
    """The dimensions of a signal that the spec names."""
    channels = signal.get("channels")
    named = channels.word("dimension") if channels is not None else None
    return [signal.word("time") or "time", *([named] if named is not None else [])]


def _check_signal(node: Node, rate: Rate | None, findings: Findings) -> None:
    channels = node.get("channels")
    time, *others = _dimensions(node)
    if channels is not None and time in others:
        findings.add(
            channels.entries["dimension"].place,
            f"dimension: {time} is the dimension that is filtered along",
            "a channel dimension",
            "name the dimension of the channels",
        )
    missing = node.get("missing")
    if missing is not None and rate is not None:
        _check_whole("bridge", missing.get("bridge"), rate, findings)


def _check_filter(node: Node, findings: Findings) -> None:
    """What a filter must be at any rate."""
    bands, taps, corners = node.get("bands"), node.get("taps"), node.get("corners")
    if bands is not None:
        check_bands(bands, not node.entries.keys() - COMMON_KEYS, findings)
    if taps is not None and taps.items and all(item.value == 0 for item in taps.items):
        findings.add(taps.place, "taps that are all 0", "at least one that is not", "state it")
    edges = [item.quantity(positive_frequency_hz) for item in corners.items] if corners else []
    if corners is not None and len(edges) == 2:
        lower, upper = edges
        if lower is not None and upper is not None and lower >= upper:
            findings.add(
                corners.place,
                "corners: " + ", ".join(item.text for item in corners.items),
                "[lower, upper]",
                "state the lower one first" if lower > upper else "state two different ones",
            )


def _loaded_taps(node: Node, folder: Path | None, findings: Findings) -> tuple[float, ...] | None:
    """The taps of a filter that keeps them in a file."""
    file, sha256 = node.word("file"), node.word("sha256")
    if file is None or sha256 is None or node.word("method") != "taps":
        return None
    # numpy is loaded only where there is a file of taps.
    from pipeline_filters.spec.taps_file import UnusableTapsError, load_taps

    try:
        return load_taps(file, sha256, folder)
    except UnusableTapsError as error:
        findings.add(
            node.entries[error.key].place,
            f"{error.key}: {error.found}",
            error.allowed,
            error.remedy,
        )
        return None


def _check_result(
    name: str, place: Place, node: Node, signals: _Named, filters: _Named, findings: Findings
) -> None:
    """A result's references, its bands, and its name."""
    bands, source = node.get("bands"), node.word("from")
    if bands is not None:
        check_bands(bands, False, findings)
    if source is not None and source not in signals.nodes:
        _unknown("from", "signal", node.entries["from"], signals, findings)
    for item in _words(node, "through"):
        if item.value not in filters.nodes:
            _unknown("through", "filter", item, filters, findings)
    if (
        source is not None
        and source in signals.nodes
        and name in _dimensions(signals.nodes[source])
    ):
        findings.add(
            place,
            f"{name} is a dimension of its signal as well",
            "a name of its own: both lie in one group of the product",
            "rename the result",
        )


def _unknown(key: str, what: str, node: Node, named: _Named, findings: Findings) -> None:
    name = str(node.value)
    findings.add(
        node.place,
        f"{key}: no {what} is named {shortened(name)}",
        listed(_some(named.nodes)) if named.nodes else f"a {what} of this spec",
        did_you_mean(name, named.nodes, f"state the {what}, or name another"),
    )


def _some(names: Iterable[str], most: int = 20) -> list[str]:
    """Names for people, who read no endless list."""
    first = list(itertools.islice(names, most + 1))
    return first if len(first) <= most else [*first[:most], "another of this spec"]


def _uses(
    rates: Mapping[str, Rate], filters: _Named, results: _Named
) -> Iterator[tuple[Rate, Node]]:
    """Each signal's rate with each filter that it goes through, once."""
    pairs = dict.fromkeys(
        (node.word("from") or "", str(item.value))
        for node in results.nodes.values()
        for item in _words(node, "through")
    )
    for signal, filter in pairs:
        if signal in rates and filter in filters.nodes:
            yield rates[signal], filters.nodes[filter]


def _check_whole(key: str, node: Node | None, rate: Rate, findings: Findings) -> None:
    """A length that counts samples must be a whole number of them at the signal's rate."""
    amount = node.quantity(hop if key == "hop" else length) if node is not None else None
    if node is None or not isinstance(amount, Amount):
        return
    samples = amount.in_samples(rate.hz)
    if samples.denominator == 1:
        return
    near = [count for count in (floor(samples), floor(samples) + 1) if count > 0]
    findings.add(
        node.place,
        f"{key}: {amount.text} is {float(samples):.6g} samples of signal {rate.signal}",
        "a whole number of samples",
        "state " + listed(f"{count} sample{'s' if count > 1 else ''}" for count in near),
    )


def _check_blocks(node: Node | None, rates: Sequence[Rate], findings: Findings) -> None:
    if node is None:
        return
    for rate in rates:
        _check_whole("hop", node.get("hop"), rate, findings)
    latency = node.get("latency")
    if latency is not None and node.word("hop") not in (None, "auto"):
        findings.add(
            latency.place,
            "latency beside a stated hop",
            "latency together with hop: auto, which it caps",
            "remove one of the two",
        )


def _warnings(signals: _Named, filters: _Named, results: _Named) -> Iterator[str]:
    """What is odd but not wrong, in the order of the text."""
    found: list[tuple[Place, str]] = []
    sources = {node.word("from") for node in results.nodes.values()}
    passed = {
        item.value
        for item in itertools.chain(*(_words(node, "through") for node in results.nodes.values()))
    }
    for what, named, used in (("signal", signals, sources), ("filter", filters, passed)):
        for name, place in named.places.items():
            if name not in used:
                found.append((place, f"{what} {name} is not used by any result"))
    for node in results.nodes.values():
        chunks, signal = node.get("chunks"), signals.nodes.get(node.word("from") or "")
        if chunks is None or signal is None:
            continue
        known = _dimensions(signal)
        for dimension, place in chunks.keys.items():
            close = None if dimension in known else nearest(dimension, known)
            if close is not None:
                found.append((place, f"chunks: is the dimension {dimension} meant to be {close}?"))
    for place, text in sorted(found, key=lambda pair: (pair[0].line, pair[0].column)):
        yield f"{place}: {text}"
