"""From YAML text to the model: read, check all, resolve references, convert."""

from __future__ import annotations

import os
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

from pipeline_filters.errors import Problem, SpecError
from pipeline_filters.spec.findings import Findings
from pipeline_filters.spec.meaning import COMMON_KEYS, check
from pipeline_filters.spec.model import (
    Band,
    Blocks,
    Channels,
    Filter,
    Missing,
    Place,
    Result,
    Signal,
    Spec,
)
from pipeline_filters.spec.quantities import (
    decibels,
    duration_seconds,
    frequency_hz,
    hop,
    length,
    positive_frequency_hz,
    proportion,
)
from pipeline_filters.spec.reader import MOST_BYTES, read_tree
from pipeline_filters.spec.schema import errors_in
from pipeline_filters.spec.tree import Node
from pipeline_filters.spec.wording import tell_all


def read_file(path: str | os.PathLike[str]) -> Spec:
    """Reads a spec from a file.

    Raises:
        SpecError: the file cannot be read, or with every problem of the spec.
    """
    file = os.fspath(path)
    try:
        with open(file, "rb") as stream:
            content = stream.read(2 * MOST_BYTES)
    except (OSError, ValueError) as error:  # ValueError: a NUL in the name
        reason = getattr(error, "strerror", None) or str(error)
        raise SpecError(
            Problem(file, f"cannot be read: {reason}", "a spec file", "check the path")
        ) from None
    return build_spec(content, file, Path(file).parent)


def build_spec(content: str | bytes, file: str, folder: Path | None) -> Spec:
    """Checks a spec's text and makes the model of it.

    Args:
        content: the YAML text, or its UTF-8 bytes.
        file: the name that places carry.
        folder: where files that the spec names lie; None where it may name none.

    Raises:
        SpecError: with every problem that was found, sorted by place.
    """
    findings = Findings()
    root = read_tree(content, file, findings)
    if root is None:
        findings.refuse()
        raise AssertionError("a text without a tree has a problem")
    tell_all(errors_in(root.plain()), root, findings)
    meaning = check(root, folder, findings)
    findings.refuse()
    text = content if isinstance(content, str) else content.decode()
    return Spec(
        text=text,
        file=file,
        title=str(root.word("title")),
        signals={name: _signal(name, *part) for name, part in _named(root, "signals")},
        filters={
            name: _filter(name, *part, meaning.taps.get(name))
            for name, part in _named(root, "filters")
        },
        results={name: _result(name, *part) for name, part in _named(root, "results")},
        blocks=_blocks(root.get("blocks")),
        notes=root.word("notes"),
        warnings=meaning.warnings,
    )


def _named(root: Node, section: str) -> Iterator[tuple[str, tuple[Node, Place]]]:
    """The parts of a section by name, each with the place of its name."""
    node = root.entries[section]
    for name, entry in node.entries.items():
        yield name, (entry, node.keys[name])


def _filter(name: str, node: Node, place: Place, loaded: tuple[float, ...] | None) -> Filter:
    """A filter with its settings converted; ``loaded`` are its taps where a file holds them."""
    places = {key: entry.place for key, entry in node.entries.items()}
    settings = {
        key: _setting(key, entry)
        for key, entry in node.entries.items()
        if key not in COMMON_KEYS and key != "file"
    }
    if loaded is not None:
        settings["taps"], places["taps"] = loaded, places["file"]
    settle = node.number("settle")
    return Filter(
        name=name,
        method=str(node.word("method")),
        settings=settings,
        bands=_bands(node.get("bands")),
        settle=Filter.settle if settle is None else settle,
        places={"": place, **places},
    )


def _setting(key: str, node: Node) -> object:
    """A method's own setting, converted as ``model.Filter`` has it."""
    match key:
        case "taps":
            return tuple(_number(item) for item in node.items)
        case "corners":
            return tuple(positive_frequency_hz(str(item.value)) for item in node.items)
        case "centre" | "width":
            return positive_frequency_hz(str(node.value))
        case "length":
            return length(str(node.value))
        case "order":
            return int(_number(node))
        case "window":
            return tuple(_parameter(item.plain()) for item in node.items or [node])
    return node.value


def _parameter(value: object) -> object:
    """A window's name or parameter; weights as a tuple."""
    return tuple(value) if isinstance(value, list) else value


def _number(node: Node) -> float:
    assert isinstance(node.value, int | float)
    return float(node.value)


def _bands(node: Node | None) -> tuple[Band, ...]:
    return tuple(_band(item) for item in node.items) if node is not None else ()


def _band(node: Node) -> Band:
    low, high, tolerance = node.word("from"), node.word("to"), node.entries["tolerance"]
    in_decibels = isinstance(tolerance.value, str)
    return Band(
        low_hz=0.0 if low is None else float(frequency_hz(low)),
        high_hz=None if high is None else float(frequency_hz(high)),
        gain=_number(node.entries["gain"]),
        tolerance=decibels(str(tolerance.value)) if in_decibels else _number(tolerance),
        decibels=in_decibels,
        place=node.place,
    )


def _signal(name: str, node: Node, place: Place) -> Signal:
    rate_text, interval_text = node.word("sample_rate"), node.word("sample_interval")
    if rate_text is not None:
        rate_hz = positive_frequency_hz(rate_text)
    else:
        rate_hz = 1 / duration_seconds(str(interval_text))
    channels = node.get("channels")
    tolerance = node.word("rate_tolerance")
    options: dict[str, Any] = {
        key: node.word(key) for key in ("unit", "breaks", "infinite") if node.word(key) is not None
    }
    if tolerance is not None:
        options["rate_tolerance"] = proportion(tolerance)
    if channels is not None:
        options["channels"] = Channels(
            str(channels.word("dimension")),
            tuple(_label(item) for item in channels.entries["keep"].items),
        )
    return Signal(
        name=name,
        variable=str(node.word("variable")),
        time=node.word("time") or "time",
        rate_hz=rate_hz,
        rate_text=rate_text or str(interval_text),
        missing=_missing(node.get("missing")),
        place=place,
        **options,
    )


def _label(node: Node) -> str | int | float:
    assert isinstance(node.value, str | int | float)
    return node.value


def _missing(node: Node | None) -> Missing:
    if node is None:
        return Missing()
    if node.kind == "mapping":
        return Missing("bridge", length(str(node.word("bridge"))))
    return Missing("spread") if node.value == "spread" else Missing()


def _result(name: str, node: Node, place: Place) -> Result:
    options: dict[str, Any] = {
        key: node.word(key) for key in ("timing", "ends", "keep_as", "title")
    }
    chunks = node.get("chunks")
    return Result(
        name=name,
        signal=str(node.word("from")),
        through=tuple(str(item.value) for item in node.entries["through"].items),
        bands=_bands(node.get("bands")),
        chunks=_chunks(chunks) if chunks is not None else None,
        place=place,
        **options,
    )


def _chunks(node: Node) -> Mapping[str, int]:
    return {dimension: int(_number(entry)) for dimension, entry in node.entries.items()}


def _blocks(node: Node | None) -> Blocks:
    if node is None:
        return Blocks()
    hop_text, latency = node.word("hop"), node.word("latency")
    options: dict[str, Any] = {}
    if node.word("precision") is not None:
        options["precision"] = node.word("precision")
    return Blocks(
        hop=None if hop_text is None else hop(hop_text),
        latency=None if latency is None else length(latency),
        place=node.place,
        **options,
    )
