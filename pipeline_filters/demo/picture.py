"""The story in one picture, for the people at the weir."""

from __future__ import annotations

from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.colors import ListedColormap, LogNorm
from matplotlib.figure import Figure
from matplotlib.layout_engine import ConstrainedLayoutEngine
from matplotlib.ticker import FuncFormatter, MultipleLocator
from numpy.typing import NDArray

from pipeline_filters.demo import recording as invented
from pipeline_filters.demo.recording import RATE_HZ, Impact, labels
from pipeline_filters.demo.spec_text import PASS_HZ
from pipeline_filters.demo.story import Evidence, runs_of

_BEFORE, _AFTER = "#8a8f98", "#0b5fa5"
_STRUCK, _LOST, _BAND = "#c8321e", "#f2b134", "#dcebf7"
_NOTHING = "#e9e9e9"
_SMALL = 8.5
_MAP_STEP = 250  # samples in a column of the map
_MAP_MM_S = (0.03, 1.0)

Array = NDArray[Any]


def draw(evidence: Evidence, record: dict[str, Any], path: Path) -> None:
    """Draws what happened into a PNG."""
    engine = ConstrainedLayoutEngine(h_pad=0.08, w_pad=0.08)
    figure = Figure(figsize=(13.5, 14), layout=engine, facecolor="white")
    FigureCanvasAgg(figure)
    figure.suptitle(
        "Gravel on the weir plate, before and after the filter (an invented recording)",
        fontsize=15,
        fontweight="bold",
    )
    grid = figure.add_gridspec(4, 2, height_ratios=[1, 1, 1.35, 1.5])
    top = figure.add_subplot(grid[0, 0])
    _draw_impact(top, figure.add_subplot(grid[1, 0], sharex=top), evidence)
    _draw_spectrum(figure.add_subplot(grid[:2, 1]), evidence, record)
    _draw_plate(figure, figure.add_subplot(grid[2, :]), evidence, record)
    _draw_jump(figure.add_subplot(grid[3, 0]), evidence, record)
    lower = grid[3, 1].subgridspec(2, 1)
    upper = figure.add_subplot(lower[0])
    _draw_dropouts(upper, figure.add_subplot(lower[1], sharex=upper), evidence, record)
    figure.savefig(path, format="png", dpi=100, metadata={"Software": "pipeline-filters demo"})


def _clock(stamps_ms: Array) -> Array:
    """Seconds of the day."""
    start = np.datetime64(invented.START.replace(" ", "T"), "ms")
    midnight = start.astype("datetime64[D]").astype("datetime64[ms]")
    return np.asarray(((start - midnight).astype(np.int64) + stamps_ms) / 1000)


def _time_of_day(seconds: float, _: object = None) -> str:
    whole = round(seconds)
    return f"{whole // 3600:02d}:{whole // 60 % 60:02d}:{whole % 60:02d}"


def _clock_axis(axes: Any, every: float) -> None:
    axes.xaxis.set_major_locator(MultipleLocator(every))
    axes.xaxis.set_major_formatter(FuncFormatter(_time_of_day))
    axes.set_xlabel("time of day (UTC)")


def _title(axes: Any, text: str) -> None:
    axes.set_title(text, loc="left", fontsize=10.5, fontweight="bold")


def _shown_impact(evidence: Evidence) -> Impact:
    """A stone of middling strength, with another near it where there is one."""
    impacts = [i for i in evidence.recording.impacts if 0.35 < i.peak < 0.8]
    starts = np.array([i.sample for i in evidence.recording.impacts])
    return min(impacts, key=lambda i: int(np.sort(np.abs(starts - i.sample))[1]))


def _draw_impact(above: Any, below: Any, evidence: Evidence) -> None:
    """One geophone around an impact: as recorded, and filtered."""
    impact = _shown_impact(evidence)
    at = impact.sample
    window = slice(at - 250, at + 551)
    seconds = (np.arange(window.start, window.stop) - at) / RATE_HZ
    name = labels()[impact.geophone]
    for axes, values, colour, title in (
        (above, evidence.recording.values, _BEFORE, f"Geophone {name} as recorded"),
        (below, evidence.after, _AFTER, "The same, filtered: impacts stay at their sample"),
    ):
        axes.plot(seconds, values[window, impact.geophone], color=colour, lw=1)
        for other in evidence.recording.impacts:
            if window.start <= other.sample < window.stop:
                axes.axvline((other.sample - at) / RATE_HZ, color=_STRUCK, lw=1, ls="--")
        axes.set_ylabel("velocity (mm/s)")
        axes.grid(alpha=0.25)
        axes.margins(x=0)
        _title(axes, title)
    above.tick_params(labelbottom=False)
    clock = float(_clock(evidence.recording.stamps_ms[at : at + 1])[0])
    below.set_xlabel(f"time after the impact at {_time_of_day(clock)} (s)")
    above.text(
        0.99,
        0.05,
        "dashed: a stone strikes",
        transform=above.transAxes,
        ha="right",
        fontsize=_SMALL,
        color=_STRUCK,
    )


def _draw_spectrum(axes: Any, evidence: Evidence, record: dict[str, Any]) -> None:
    """The median geophone's spectrum, with the tones that are not gravel."""
    floor_db = -110.0
    hertz = evidence.hertz
    before = 10 * np.log10(np.median(evidence.before_density, axis=0) + 1e-30)
    after = 10 * np.log10(np.median(evidence.after_density, axis=0) + 1e-30)
    axes.axvspan(*PASS_HZ, color=_BAND, lw=0)
    axes.text(
        sum(PASS_HZ) / 2,
        floor_db + 3,
        f"kept: {PASS_HZ[0]} to {PASS_HZ[1]} Hz",
        ha="center",
        fontsize=_SMALL,
        color=_AFTER,
    )
    axes.plot(hertz, before, color=_BEFORE, lw=1, label="as recorded")
    axes.plot(hertz, after, color=_AFTER, lw=1.2, label="filtered")
    for tone in record["tones"]:
        peak = float(before[np.argmin(np.abs(hertz - tone["hz"]))])
        is_pump = tone["name"] == "pump"  # its line lies close to the hum's: its name, above both
        axes.annotate(
            f"{tone['name']} {tone['hz']} Hz\n{tone['down_db']:.0f} dB down",
            (tone["hz"], peak),
            xytext=(0, 38) if is_pump else (4, -4),
            textcoords="offset points",
            ha="left",
            va="bottom" if is_pump else "top",
            fontsize=_SMALL,
            color=_STRUCK,
            arrowprops={"arrowstyle": "-", "lw": 0.7, "color": _STRUCK} if is_pump else None,
        )
    axes.set_xlim(0, 400)
    axes.set_xticks(range(0, 401, 50))
    axes.set_ylim(floor_db, 20)
    axes.set_xlabel("frequency (Hz)")
    axes.set_ylabel("power density (dB re 1 (mm/s)²/Hz)")
    axes.grid(alpha=0.25)
    axes.legend(loc="upper right", frameon=False)
    _title(axes, "Spectrum, median geophone: hum and pump out, gravel kept")


def _draw_plate(figure: Figure, axes: Any, evidence: Evidence, record: dict[str, Any]) -> None:
    """Where and when gravel passes: the largest magnitude in each quarter of a second."""
    clock = _clock(evidence.recording.stamps_ms)
    edges = [0, *evidence.breaks, clock.size]
    geophones = np.arange(evidence.after.shape[1] + 1) + 0.5
    image: Any = None
    for low, high in pairwise(edges):
        starts = np.arange(low, high - _MAP_STEP + 1, _MAP_STEP)
        blocks = evidence.after[low : low + starts.size * _MAP_STEP]
        blocks = blocks.reshape(starts.size, _MAP_STEP, -1)
        lost = np.isnan(blocks).any(axis=1)
        loudest = np.where(lost, np.nan, np.abs(np.nan_to_num(blocks)).max(axis=1))
        times = np.append(clock[starts], clock[starts[-1]] + _MAP_STEP / RATE_HZ)
        colours = np.clip(loudest.T, *_MAP_MM_S)
        norm = LogNorm(*_MAP_MM_S)
        image = axes.pcolormesh(times, geophones, colours, norm=norm, cmap="Blues")
        marks = np.where(lost.T, 1.0, np.nan)
        axes.pcolormesh(times, geophones, marks, cmap=ListedColormap([_LOST]), vmin=0, vmax=1)
    last, first = clock[evidence.breaks[0] - 1], clock[evidence.breaks[0]]
    _mark_gap(axes, last, first, f"clock jumps\nby {first - last - 1 / RATE_HZ:.0f} s")
    name, runs = record["dropouts"]["geophone"], record["dropouts"]["runs"]
    first_longer = next(run for run in runs if not run["bridged"])
    axes.annotate(
        f"dropouts of {name}",
        (clock[first_longer["first_sample"]], labels().index(name) + 1.6),
        xytext=(0, 18),
        textcoords="offset points",
        ha="center",
        fontsize=_SMALL,
        bbox={"facecolor": "white", "edgecolor": "none", "pad": 1},
        arrowprops={"arrowstyle": "-", "lw": 0.7},
    )
    axes.set_yticks([1, 6, 12, 17, 24], [labels()[n - 1] for n in (1, 6, 12, 17, 24)])
    axes.set_ylabel("geophone")
    axes.set_xlim(clock[0], clock[-1])
    _clock_axis(axes, 20)
    bar = figure.colorbar(image, ax=axes, pad=0.01)
    bar.set_label("largest magnitude (mm/s)")
    bar.set_ticks([0.03, 0.1, 0.3, 1], labels=["0.03", "0.1", "0.3", "1"])
    _title(axes, "The plate, filtered: where and when gravel strikes (yellow: no results)")


def _mark_gap(axes: Any, low: float, high: float, text: str) -> None:
    axes.axvspan(low, high, facecolor=_NOTHING, hatch="//", edgecolor="#c4c4c4", lw=0)
    axes.text(
        (low + high) / 2,
        0.5,
        text,
        transform=axes.get_xaxis_transform(),
        ha="center",
        va="center",
        fontsize=_SMALL,
        bbox={"facecolor": "white", "edgecolor": "none", "pad": 3},
    )


def _draw_jump(axes: Any, evidence: Evidence, record: dict[str, Any]) -> None:
    """The jump of the clock: nothing is drawn across it, and nothing crossed it."""
    alone = record["jump"]["filtered_alone"]
    column = labels().index(alone["geophone"])
    at = evidence.breaks[0]
    clock = _clock(evidence.recording.stamps_ms)
    for part in (slice(at - 12_000, at), slice(at, at + 12_000)):
        before, after = evidence.recording.values[part, column], evidence.after[part, column]
        axes.plot(clock[part], before, color=_BEFORE, lw=0.5, label="as recorded")
        axes.plot(clock[part], after, color=_AFTER, lw=0.8, label="filtered")
        for low, high in runs_of(np.isnan(after)):
            ends = clock[part][[low, high - 1]]
            axes.axvspan(*ends, color=_LOST, lw=0, alpha=0.6, label="blank near the jump")
    same = alone["samples_that_differ"] == 0
    proof = "\nfiltered alone, what follows\nis bit for bit the same" if same else ""
    jump = f"clock jumps by {record['jump']['seconds']:g} s:\nno samples{proof}"
    _mark_gap(axes, clock[at - 1], clock[at], jump)
    axes.set_ylabel("velocity (mm/s)")
    _clock_axis(axes, 10)
    axes.margins(x=0)
    axes.grid(alpha=0.25)
    handles, names = axes.get_legend_handles_labels()
    once = dict(zip(names, handles, strict=True))
    axes.legend(once.values(), once.keys(), loc="upper center", facecolor="white", framealpha=1)
    _title(axes, f"Geophone {alone['geophone']} at the jump: the filter ends, and begins anew")


def _draw_dropouts(above: Any, below: Any, evidence: Evidence, record: dict[str, Any]) -> None:
    """The geophone with dropouts: what was lost, and what is missing for it."""
    name = record["dropouts"]["geophone"]
    column = labels().index(name)
    runs = record["dropouts"]["runs"]
    clock = _clock(evidence.recording.stamps_ms)
    bridged = [run for run in runs if run["bridged"]]
    first_longer = next(run for run in runs if not run["bridged"])
    start = bridged[0]["first_sample"] - 400
    stop = first_longer["first_sample"] + first_longer["samples"] + 1400
    window = slice(start, stop)
    seconds = clock[window] - clock[start]
    after = evidence.after[window, column]
    above.plot(seconds, evidence.recording.values[window, column], color=_BEFORE, lw=0.6)
    below.plot(seconds, after, color=_AFTER, lw=0.8)
    for run in (*bridged, first_longer):
        low = (run["first_sample"] - start) / RATE_HZ
        high = low + run["samples"] / RATE_HZ
        for axes in (above, below):
            if not run["bridged"]:
                axes.axvspan(low, high, color=_STRUCK, lw=0, alpha=0.6 if axes is above else 0.35)
            else:
                axes.plot(
                    [low], [0.03], "^", ms=7, color=_STRUCK, transform=axes.get_xaxis_transform()
                )
        above.annotate(
            f"{run['samples']} lost",
            (low, 1.0),
            xycoords=above.get_xaxis_transform(),
            xytext=(6 if run is first_longer else 0, -12),
            textcoords="offset points",
            ha="left" if run is first_longer else "center",
            fontsize=_SMALL,
            color=_STRUCK,
        )
    for low, high in runs_of(np.isnan(after)):
        below.axvspan(low / RATE_HZ, high / RATE_HZ, color=_LOST, lw=0, alpha=0.45)
        below.text(
            (low + high) / 2 / RATE_HZ,
            0.75,
            f"{high - low:,} results missing",
            transform=below.get_xaxis_transform(),
            ha="center",
            fontsize=_SMALL,
        )
    last = (bridged[-1]["first_sample"] - start) / RATE_HZ
    below.annotate(
        "bridged",
        (last, 0.03),
        xycoords=below.get_xaxis_transform(),
        xytext=(7, -2),
        textcoords="offset points",
        fontsize=_SMALL,
        color=_STRUCK,
    )
    for axes in (above, below):
        axes.set_ylabel("mm/s")
        axes.margins(x=0)
        axes.grid(alpha=0.25)
    above.set_ylim(top=above.get_ylim()[1] * 1.4)
    above.tick_params(labelbottom=False)
    below.set_xlabel(f"time after {_time_of_day(float(clock[start]))} (s)")
    _title(above, f"Geophone {name}: samples lost, as recorded")
    _title(below, f"{name} filtered: short dropouts bridged, results near long ones missing")
