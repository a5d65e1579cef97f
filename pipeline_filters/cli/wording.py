"""Records in short sentences, or as JSON."""

from __future__ import annotations

import json
from collections.abc import Callable, Iterator
from typing import Any

Record = dict[str, Any]
MIB = 1 << 20


def show(record: Record, as_json: bool, lines: Callable[[Record], Iterator[str]]) -> None:
    """Prints a record for machines or for people."""
    if as_json:
        print(json.dumps(record, indent=2, allow_nan=False))
        return
    for line in lines(record):
        print(line)


def check_lines(record: Record) -> Iterator[str]:
    """What ``check`` says."""
    yield from _warnings(record)
    for name, result in record["results"].items():
        yield from _chain_lines(name, result)
        yield from _design_lines(result)
        if "samples" in result:
            yield f"  fits the source: {_plural(result['samples'], 'sample')}, " + _axis(result)
    yield "The spec is in order."


def forecast_lines(record: Record) -> Iterator[str]:
    """What ``forecast`` says."""
    yield from _warnings(record)
    for name, result in record["results"].items():
        yield from _chain_lines(name, result)
        yield from _layout_lines(result)
    yield _memory_line(record["memory"])


def run_lines(record: Record) -> Iterator[str]:
    """What ``filter`` says."""
    yield from _warnings(record)
    if record["state"] == "nothing to do":
        yield f"Nothing to do: {record['product']} holds every result of this spec and source."
        return
    for name, result in record["results"].items():
        if "samples_written" not in result:
            yield f"{name}: was done before"
            continue
        missing = result["samples_missing"] / max(1, result["samples_written"])
        yield (
            f"{name}: {_plural(result['samples_written'], 'sample')} written, {missing:.3%} of "
            f"them missing, {_axis(result)}, published until {result['published_until']}"
        )
        if result["spans_done_before"]:
            yield f"  {_plural(result['spans_done_before'], 'span')} had been done before"
        if len(result["made_under"]) > 1:
            yield (
                "  caution: made under several versions or classes of processor; "
                "see made_under with --json"
            )
    memory = record["memory"]
    yield (
        f"{_plural(memory['workers'], 'worker')}, at most "
        f"{memory['peak_bytes_a_worker'] / MIB:.0f} MiB each (forecast "
        f"{memory['forecast_bytes_a_worker'] / MIB:.0f}), {record['seconds']:.1f} s"
    )


def _warnings(record: Record) -> Iterator[str]:
    for warning in record["warnings"]:
        yield f"warning: {warning}"
    for note in record.get("notes", ()):
        yield f"note: {note}"


def _chain_lines(name: str, result: Record) -> Iterator[str]:
    through = " and ".join(result["through"])
    yield f"{name}: {result['from']} through {through}, {result['timing']}, ends {result['ends']}"
    for stage in result["stages"]:
        if stage["runs_as"] == "overlap-add":
            yield (
                f"  {_plural(stage['taps'], 'tap')}, transforms of {stage['transform_samples']:,} "
                f"samples, hop {stage['hop_samples']:,}"
            )
        elif stage["runs_as"] == "direct sum":
            yield f"  {_plural(stage['taps'], 'tap')}, summed directly"
        else:
            yield f"  a recursion of {_plural(stage['sections'], 'second-order section')}"
    yield f"  delay {_amount(result['delay'], 'varies with frequency')}" + (
        ", stamped half a sample later" if result["stamped_half_a_sample_later"] else ""
    )
    before = _amount(result["support_before"], "without bound")
    yield f"  support {before} before and {_amount(result['support_after'])} after a result"
    if result["block_reach_before"] is not None:
        yield (
            f"  block reach {_amount(result['block_reach_before'])} before and "
            f"{_amount(result['block_reach_after'])} after"
        )
    yield f"  hold-back {_amount(result['hold_back'])}"


def _design_lines(result: Record) -> Iterator[str]:
    for band in result["bands"]:
        top = "half the rate" if band["high_hz"] is None else f"{band['high_hz']:g} Hz"
        unit = " dB" if band["unit"] == "dB" else ""
        what = "level" if unit and band["gain"] == 0 else "deviation"
        yield (
            f"  {band['of']}, {band['low_hz']:g} Hz to {top}, gain {band['gain']:g}: {what} "
            f"{band['reached']:.4g}{unit} at {band['worst_hz']:.6g} Hz, {band['limit']:g}{unit} "
            "allowed"
        )
    for note in result["notes"]:
        yield f"  {note}"


def _layout_lines(result: Record) -> Iterator[str]:
    yield (
        f"  {_plural(result['samples'], 'sample')} of {_plural(result['channels'], 'channel')}, "
        f"{_axis(result)}, {_plural(result['spans'], 'span')} in "
        f"{_plural(result['tasks'], 'task')}"
    )
    often = result["decodings_of_a_chunk"]
    line = f"  each chunk of the source is decoded {often:.2f} times"
    better = result.get("decodings_with_the_chunks_of_the_source")
    if better is not None and better < often - 0.05:
        line += (
            f"; with the source's own chunks in the product {better:.2f} times, which saves "
            f"{1 - better / often:.0%} of the decoding"
        )
    yield line


def _axis(result: Record) -> str:
    drift = f", rate off by {result['drift_ppm']:.2g} ppm" if result["drift_ppm"] else ""
    return _plural(result["stretches"], "stretch", "stretches") + drift


def _memory_line(memory: Record) -> str:
    budget = memory["budget_bytes"]
    within = "" if budget is None else f", within {budget / MIB:,.0f} MiB"
    each = memory["forecast_bytes_a_worker"] / MIB
    return f"{_plural(memory['workers'], 'worker')}, up to {each:,.0f} MiB each{within}"


def _amount(amount: Record | None, otherwise: str = "none") -> str:
    if amount is None:
        return otherwise
    return f"{_number(amount['samples'])} samples ({_seconds(amount['seconds'])})"


def _seconds(seconds: float) -> str:
    for size, unit in ((86400, "days"), (3600, "h"), (60, "min")):
        if seconds >= 2 * size:
            return f"{_number(seconds / size, 3)} {unit}"
    return f"{seconds * 1000:.3g} ms" if 0 < seconds < 1 else f"{seconds:.4g} s"


def _number(value: float, digits: int = 6) -> str:
    """A number for people: large ones whole, without an exponent."""
    return f"{value:,.0f}" if abs(value) >= 10**digits / 10 else f"{value:,.{digits}g}"


def _plural(count: int, word: str, many: str = "") -> str:
    return f"{count:,} {word if count == 1 else many or word + 's'}"
