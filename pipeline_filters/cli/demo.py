"""``demo [FOLDER]``."""

from __future__ import annotations

from argparse import Namespace
from collections.abc import Iterator
from typing import Any

from pipeline_filters.cli.progress import Progress
from pipeline_filters.cli.surroundings import workers_of
from pipeline_filters.cli.wording import show
from pipeline_filters.demo.telling import tell


def call(options: Namespace) -> None:
    """Makes a small invented recording, filters it, and tells what happened."""
    with Progress(quiet=options.json) as progress:
        record = tell(options.folder, workers=workers_of(options), progress=progress)
    show(record, options.json, demo_lines)


def demo_lines(record: dict[str, Any]) -> Iterator[str]:
    """What ``demo`` says."""
    yield from _recording_lines(record)
    yield from _tone_lines(record["tones"])
    yield from _impact_lines(record["impacts"])
    yield from _jump_lines(record["jump"])
    yield from _dropout_lines(record["dropouts"])
    yield ""
    for name, path in record["paths"].items():
        yield f"{name + ':':<11}{path}"
    picture = record["picture"]
    if not picture["drawn"]:
        yield f"picture:   left out ({picture['reason']}); to draw it: {picture['remedy']}"
    yield f"next:      {record['next']}"
    yield f"caution:   {record['caution']}"


def _recording_lines(record: dict[str, Any]) -> Iterator[str]:
    made = record["recording"]
    verb = "Kept the" if made["state"] == "kept" else "Made an"
    yield (
        f"{verb} invented recording: {made['geophones']} geophones under a plate in a weir, "
        f"{made['seconds']:.0f} s at {made['rate_hz']:,} samples a second."
    )
    if record["filtered"]["state"] == "nothing to do":
        yield "It had been filtered before: nothing to do. Measured on the product:"
    else:
        yield "Filtered it. Measured on the product:"


def _tone_lines(tones: list[dict[str, Any]]) -> Iterator[str]:
    for tone in tones:
        yield (
            f"  {tone['name']:<5}{tone['hz']:>3} Hz  {tone['before_db']:6.1f} dB before, "
            f"{tone['after_db']:6.1f} dB after: {tone['down_db']:.0f} dB down"
        )
    yield "             (dB re 1 mm/s, within 1 Hz, the median geophone)"


def _impact_lines(impacts: dict[str, Any]) -> Iterator[str]:
    line = (
        f"  Impacts: {impacts['at_their_sample']} of {impacts['count']} are found at the very "
        "sample at which they struck"
    )
    if impacts["largest_shift_samples"]:
        line += f", the others at most {impacts['largest_shift_samples']} samples off"
    yield f"{line}; {impacts['at_their_sample_before']} before filtering."
    yield (
        f"    The typical one stands {impacts['peak_over_background_after']:.1f} times above the "
        f"background, {impacts['peak_over_background_before']:.1f} times before."
    )


def _jump_lines(jump: dict[str, Any]) -> Iterator[str]:
    alone = jump["filtered_alone"]
    blank = max(jump["results_blank_before"], jump["results_blank_after"])
    stamps = "kept every stamp" if jump["stamps_kept"] else "did NOT keep the stamps"
    yield (
        f"  Jump: the clock jumps by {jump['seconds']:g} s; the product has "
        f"{jump['stretches']} stretches and {stamps}."
    )
    if alone["samples_that_differ"] == 0:
        proof = "bit for bit the same: nothing crossed"
    else:
        proof = f"different in {alone['samples_that_differ']:,} samples"
    yield (
        f"    The {alone['samples']:,} samples of {alone['geophone']} after it, filtered alone, "
        f"come out {proof}."
    )
    if blank:
        yield (
            f"    Within {blank:,} samples of it and of the ends no result is given, lest what a "
            "filter makes up there pass for an impact."
        )


def _dropout_lines(dropouts: dict[str, Any]) -> Iterator[str]:
    bridged = [run for run in dropouts["runs"] if run["bridged"]]
    longer = [run for run in dropouts["runs"] if not run["bridged"]]
    yield (
        f"  Dropouts of {dropouts['geophone']}: {len(bridged)} runs of up to "
        f"{dropouts['bridge_up_to_samples']} samples were bridged, "
        f"{sum(run['results_missing'] for run in bridged)} results are missing for them."
    )
    for run in longer:
        yield (
            f"    A run of {run['samples']} samples was not; {run['results_missing']:,} results "
            "around it are marked missing."
        )
    yield f"    Results missing at the other geophones: {dropouts['results_missing_elsewhere']}."
