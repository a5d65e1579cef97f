"""What the filter did to the invented recording, measured on the product."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pipeline_filters.demo import recording as invented
from pipeline_filters.demo.folder import written
from pipeline_filters.demo.recording import HUM_HZ, PUMP_HZ, RATE_HZ, Recording, impact_pulse
from pipeline_filters.demo.spec_text import RESULT
from pipeline_filters.demo.spectra import density, level_db
from pipeline_filters.product.reading import open_product
from pipeline_filters.spec import read_spec
from pipeline_filters.stage.running import run

_SEARCHED = 20  # samples each way, for an impact's time
_PEAK_WITHIN = 40  # samples from an impact's start
_SIGMA_OF_MEDIAN = 1.4826  # of a normal law, over the median magnitude

Array = NDArray[Any]


@dataclass(frozen=True, eq=False)
class Evidence:
    """All that the story and the picture are made from.

    Attributes:
        recording: before.
        after: the product's samples, shape (time, geophone), NaN where missing.
        breaks: indices at which a stretch after the first begins.
        hertz, before_density, after_density: power densities by geophone.
    """

    recording: Recording
    after: Array
    breaks: list[int]
    hertz: Array
    before_density: Array
    after_density: Array


def gather(recording: Recording, product: Path) -> Evidence:
    """Reads a product of the recording, and takes its spectra."""
    after = np.asarray(open_product(product)[RESULT].values)
    steps = np.diff(recording.stamps_ms)
    breaks = [int(at) + 1 for at in np.flatnonzero(steps != 1000 // RATE_HZ)]
    hertz, before_density = density(recording.values, RATE_HZ, breaks)
    _, after_density = density(after, RATE_HZ, breaks)
    return Evidence(recording, after, breaks, hertz, before_density, after_density)


def measured(evidence: Evidence, spec: Path, product: Path) -> dict[str, Any]:
    """What became of the hum, the impacts, the jump and the dropouts."""
    return {
        "tones": [_tone(evidence, "hum", hertz) for hertz in HUM_HZ]
        + [_tone(evidence, "pump", PUMP_HZ)],
        "impacts": _impacts(evidence),
        "jump": _jump(evidence, spec, product),
        "dropouts": _dropouts(evidence, spec),
    }


def _tone(evidence: Evidence, name: str, hertz: float) -> dict[str, Any]:
    """A tone's level before and after, dB re 1 mm/s rms; the median over geophones."""
    before = level_db(evidence.hertz, evidence.before_density, hertz)
    after = level_db(evidence.hertz, evidence.after_density, hertz)
    return {
        "name": name,
        "hz": hertz,
        "before_db": round(before, 2),
        "after_db": round(after, 2),
        "down_db": round(before - after, 2),
    }


def _impacts(evidence: Evidence) -> dict[str, Any]:
    """Where impacts are found, by correlation with the pulse that they were made from.

    Each is judged at its nearest geophone whose results are all there.
    """
    before, after = evidence.recording.values, evidence.after
    shifts, shifts_before, moved, out_before, out_after = [], [], 0, [], []
    noise_before, noise_after = _background(before), _background(after)
    for impact in evidence.recording.impacts:
        pulse = impact_pulse(impact.ring_hz)
        around = slice(impact.sample - _SEARCHED, impact.sample + pulse.size + _SEARCHED)
        order = np.argsort(np.abs(np.arange(after.shape[1]) - impact.geophone), kind="stable")
        geophone = next(int(g) for g in order if np.isfinite(after[around, g]).all())
        moved += geophone != impact.geophone
        shifts.append(_shift(after[around, geophone], pulse))
        shifts_before.append(_shift(before[around, geophone], pulse))
        peak = slice(impact.sample, impact.sample + _PEAK_WITHIN)
        out_before.append(_peak(before[peak, geophone]) / noise_before[geophone])
        out_after.append(_peak(after[peak, geophone]) / noise_after[geophone])
    return {
        "count": len(shifts),
        "at_their_sample": shifts.count(0),
        "largest_shift_samples": max(map(abs, shifts)),
        "at_their_sample_before": shifts_before.count(0),
        "judged_at_the_next_geophone": moved,
        "peak_over_background_before": round(float(np.median(out_before)), 2),
        "peak_over_background_after": round(float(np.median(out_after)), 2),
    }


def _shift(values: Array, pulse: Array) -> int:
    """By how many samples a pulse is found later than it was put in."""
    return int(np.argmax(np.correlate(values.astype(np.float64), pulse, "valid"))) - _SEARCHED


def _peak(values: Array) -> float:
    return float(np.abs(values).max())


def _background(values: Array) -> Array:
    """The rms of what is there most of the time, by geophone; strong samples count little."""
    return np.asarray(_SIGMA_OF_MEDIAN * np.nanmedian(np.abs(values), axis=0))


def _jump(evidence: Evidence, spec: Path, product: Path) -> dict[str, Any]:
    """What the product's axis says, and whether anything crossed the jump.

    The part after the jump is filtered once more, as a recording of its own: had anything
    crossed, its results would differ.
    """
    recording, (at,) = evidence.recording, evidence.breaks
    stamps = np.asarray(open_product(product)["time"].values).astype("datetime64[ms]")
    given = np.datetime64(invented.START.replace(" ", "T"), "ms") + recording.stamps_ms
    geophone = next(i.geophone for i in reversed(recording.impacts) if i.sample < at)
    alone = Recording(recording.values[at:], recording.stamps_ms[at:], ())
    with TemporaryDirectory(prefix="weir-demo-") as place:
        source, made = Path(place, "after-the-jump.zarr"), Path(place, "filtered.zarr")
        with written(source):
            invented.write(alone, source, slice(geophone, geophone + 1))
        run(spec, source, made)
        again = np.asarray(open_product(made)[RESULT].values)[:, 0]
    part = evidence.after[at:, geophone]
    blank = np.all(np.isnan(evidence.after), axis=1)
    return {
        "seconds": round(_step_seconds(recording, at) - 1 / RATE_HZ, 3),
        "first_sample_after": at,
        "stamps_kept": bool(np.array_equal(stamps, given)),
        "stretches": len(evidence.breaks) + 1,
        "results_blank_after": int(np.argmin(blank[at:])),
        "results_blank_before": int(np.argmin(blank[:at][::-1])),
        "filtered_alone": {
            "geophone": invented.labels()[geophone],
            "samples": int(part.size),
            "samples_that_differ": int(np.sum(part.view(np.uint32) != again.view(np.uint32))),
        },
    }


def _step_seconds(recording: Recording, at: int) -> float:
    return float(recording.stamps_ms[at] - recording.stamps_ms[at - 1]) / 1000


def _dropouts(evidence: Evidence, spec: Path) -> dict[str, Any]:
    """Each run of lost samples, and the results that are missing for it."""
    signal = read_spec(spec).signals["plate"]
    assert signal.missing.bridge is not None
    longest = int(signal.missing.bridge.in_samples(signal.rate_hz))
    before, after = np.isnan(evidence.recording.values), np.isnan(evidence.after)
    after &= ~after.all(axis=1, keepdims=True)  # the ends are blank at all geophones
    (geophone,) = np.flatnonzero(before.any(axis=0))
    lost = runs_of(after[:, geophone])
    runs = []
    for start, stop in runs_of(before[:, geophone]):
        bridged = stop - start <= longest
        holes = [high - low for low, high in lost if low < stop and start < high]
        runs.append(
            {
                "first_sample": start,
                "samples": stop - start,
                "bridged": bridged,
                "results_missing": sum(holes),
            }
        )
    return {
        "geophone": invented.labels()[geophone],
        "bridge_up_to_samples": longest,
        "samples_missing": int(before.sum()),
        "results_missing": int(after.sum()),
        "results_missing_elsewhere": int(after.sum() - after[:, geophone].sum()),
        "runs": runs,
    }


def runs_of(marks: Array) -> list[tuple[int, int]]:
    """Runs of true, as start and stop."""
    edges = np.flatnonzero(np.diff(np.concatenate([[False], marks, [False]]).astype(np.int8)))
    return [(int(low), int(high)) for low, high in edges.reshape(-1, 2)]
