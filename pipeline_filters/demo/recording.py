"""The invented recording: 24 geophones under a plate in a weir, listening for gravel.

Nothing in it was measured anywhere. What a recording from the field never tells is known
here: when each impact struck, how loud the hum is, which samples were lost.
"""

from __future__ import annotations

import json
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

import numpy as np
import zarr
from numpy.typing import NDArray

RATE_HZ = 1000
GEOPHONES = 24
SAMPLES = 180_000
CHUNKS = (30_000, 8)
START = "2026-04-11 05:40:00"
JUMP_AT = 91_300  # the first sample after the jump
JUMP_SECONDS = 37
HUM_HZ = (50, 150, 250)
PUMP_HZ = 17
ATTRIBUTE = "invented"

_SEED = 20_260_411
_HUM_PEAK = (0.40, 0.16, 0.07)  # mm/s, at the middle of the plate
_PUMP_PEAK = 0.25
_RUMBLE_RMS = 0.30
_HISS_RMS = 0.02
_STEP = 1 / 4096  # mm/s, of the digitiser
_PULSE_SAMPLES = 100
_DECAY_SAMPLES = 11.0
_FALL_OFF = 2.0  # geophones, over which an impact is e times weaker
# Bursts of gravel: first second, last second, impacts.
_BURSTS = ((12.0, 34.0, 24), (58.0, 80.0, 20), (104.0, 166.0, 44))
_NOT_CLOSER = 180  # samples
_BEFORE_JUMP = 3000  # samples from a last strong impact to the jump
_DROPOUT_GEOPHONE = 16  # the seventeenth
# Sample and length of each run of lost samples.
_DROPOUTS = ((150_400, 3), (151_100, 5), (151_650, 2), (153_800, 60), (160_200, 800))

Array = NDArray[Any]


@dataclass(frozen=True)
class Impact:
    """A stone striking the plate.

    Attributes:
        sample: at which it begins.
        geophone: the nearest, counted from 0.
        ring_hz: of the plate's answer.
        peak: mm/s at the nearest geophone.
    """

    sample: int
    geophone: int
    ring_hz: float
    peak: float


@dataclass(frozen=True, eq=False)
class Recording:
    """Samples in mm/s, shape (time, geophone), NaN where lost; and what is known of them."""

    values: NDArray[np.float32]
    stamps_ms: NDArray[np.int64]
    impacts: tuple[Impact, ...]


def impact_pulse(ring_hz: float) -> NDArray[np.float64]:
    """The plate's answer to a stone: a sine that dies away; its largest magnitude is 1."""
    samples = np.arange(_PULSE_SAMPLES)
    pulse = np.exp(-samples / _DECAY_SAMPLES) * np.sin(2 * np.pi * ring_hz / RATE_HZ * samples)
    return np.asarray(pulse / np.abs(pulse).max())


def invent() -> Recording:
    """Makes the recording; the same whenever it is called."""
    chance = np.random.default_rng(_SEED)
    impacts = _impacts(chance)
    values = _river(chance) + _machines(chance)
    plate = np.arange(GEOPHONES)
    for impact in impacts:
        near = impact.peak * np.exp(-np.abs(plate - impact.geophone) / _FALL_OFF)
        pulse = impact_pulse(impact.ring_hz)
        values[impact.sample : impact.sample + pulse.size] += pulse[:, None] * near
    values = np.round(values / _STEP) * _STEP
    for start, length in _DROPOUTS:
        values[start : start + length, _DROPOUT_GEOPHONE] = np.nan
    stamps_ms = np.arange(SAMPLES, dtype=np.int64) * (1000 // RATE_HZ)
    stamps_ms[JUMP_AT:] += JUMP_SECONDS * 1000
    return Recording(values.astype(np.float32), stamps_ms, impacts)


def _impacts(chance: np.random.Generator) -> tuple[Impact, ...]:
    starts: list[int] = []
    for first, last, count in _BURSTS:
        room = round((last - first) * RATE_HZ) - count * _NOT_CLOSER
        # Sorted draws from what is left, then spread: never closer, yet by chance.
        draws = np.sort(chance.integers(0, room, count)) + np.arange(count) * _NOT_CLOSER
        starts += [round(first * RATE_HZ) + int(draw) for draw in draws]
    middle = np.clip(chance.normal(13, 4, len(starts)), 1, GEOPHONES - 2)
    rings = chance.uniform(60, 170, len(starts))
    peaks = np.exp(chance.uniform(np.log(0.25), np.log(1.6), len(starts)))
    impacts = [
        Impact(start, round(float(at)), round(float(ring), 1), round(float(peak), 3))
        for start, at, ring, peak in zip(starts, middle, rings, peaks, strict=True)
    ]
    impacts.append(Impact(JUMP_AT - _BEFORE_JUMP, 11, 96.0, 1.4))
    return tuple(sorted(impacts, key=lambda impact: impact.sample))


def _river(chance: np.random.Generator) -> NDArray[np.float64]:
    """Rumble that falls off above a few hertz, and a hiss at all frequencies."""
    hertz = np.fft.rfftfreq(SAMPLES, 1 / RATE_HZ)
    shape = 1 / (1 + (hertz / 6) ** 2)
    noise = np.fft.rfft(chance.standard_normal((GEOPHONES, SAMPLES)), axis=1)
    rumble = np.fft.irfft(noise * shape, SAMPLES, axis=1)
    rumble *= _RUMBLE_RMS / rumble.std()
    return (rumble + _HISS_RMS * chance.standard_normal(rumble.shape)).T.copy()


def _machines(chance: np.random.Generator) -> NDArray[np.float64]:
    """Mains hum, its harmonics and a pump; the mains wander by some hundredths of a hertz."""
    seconds = np.arange(SAMPLES) / RATE_HZ
    wander = 0.02 * np.sin(2 * np.pi * seconds / 70) / (2 * np.pi / 70)  # in turns of 50 Hz
    cable = 1 + 0.3 * chance.uniform(-1, 1, GEOPHONES)
    values = np.zeros((SAMPLES, GEOPHONES))
    for hertz, peak in zip(HUM_HZ, _HUM_PEAK, strict=True):
        turns = hertz * seconds + hertz / HUM_HZ[0] * wander
        values += peak * np.sin(2 * np.pi * turns)[:, None] * cable
    pump = np.sin(2 * np.pi * PUMP_HZ * seconds)[:, None]
    return values + _PUMP_PEAK * pump * np.linspace(1.3, 0.7, GEOPHONES)


def labels() -> list[str]:
    """The geophones' names."""
    return [f"g{number:02d}" for number in range(1, GEOPHONES + 1)]


def write(recording: Recording, path: Path, columns: slice = slice(None)) -> None:
    """Writes a recording as a Zarr store with its time axis and labels.

    Args:
        columns: the geophones written.
    """
    names = labels()[columns]
    values = recording.values[:, columns]
    known: Any = {
        "note": "invented, not measured",
        "impacts": [asdict(i) for i in recording.impacts],
    }
    group = zarr.open_group(str(path), mode="w", zarr_format=3, attributes={ATTRIBUTE: known})
    velocity = group.create_array(
        "velocity",
        shape=values.shape,
        dtype=values.dtype,
        chunks=(CHUNKS[0], min(CHUNKS[1], len(names))),
        dimension_names=("time", "geophone"),
        attributes={"units": "mm/s", "long_name": "vertical velocity of the plate"},
    )
    velocity[...] = values
    time = group.create_array(
        "time",
        shape=recording.stamps_ms.shape,
        dtype=recording.stamps_ms.dtype,
        chunks=(CHUNKS[0],),
        dimension_names=("time",),
        attributes={"units": f"milliseconds since {START}", "calendar": "standard"},
    )
    time[...] = recording.stamps_ms
    geophone = group.create_array(
        "geophone",
        shape=(len(names),),
        dtype=str,
        chunks=(len(names),),
        dimension_names=("geophone",),
    )
    geophone[...] = np.array(names, dtype=object)


def read(path: Path) -> Recording:
    """Reads what ``write`` wrote.

    Raises:
        LookupError, TypeError, ValueError, OSError: it is not all there.
    """
    group = zarr.open_group(str(path), mode="r", use_consolidated=False)
    known: Any = json.loads(json.dumps(group.attrs[ATTRIBUTE]))
    impacts = tuple(Impact(**fields) for fields in known["impacts"])
    values, stamps_ms = np.asarray(group["velocity"]), np.asarray(group["time"])
    if values.shape != (SAMPLES, GEOPHONES) or stamps_ms.shape != (SAMPLES,):
        raise ValueError(f"samples of shape {values.shape}")
    return Recording(values, stamps_ms, impacts)
