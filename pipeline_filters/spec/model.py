"""The frozen model of a checked spec: plain values, no YAML, no schema.

Everything here is immutable and comparable. Numbers that carry a unit in the spec
are held exactly (`fractions.Fraction`) where they may decide a count of samples.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from fractions import Fraction
from typing import Literal

Timing = Literal["causal", "aligned", "zero-phase"]
Ends = Literal["zero", "hold", "even", "odd", "blank"]
Precision = Literal["float64", "float32"]


@dataclass(frozen=True)
class Place:
    """Where something stands in the spec's text: 1-based line and column."""

    file: str
    line: int
    column: int

    def __str__(self) -> str:
        return f"{self.file}:{self.line}:{self.column}"


@dataclass(frozen=True)
class Amount:
    """A stretch of time, stated in samples or in seconds (exactly one is set)."""

    text: str
    samples: Fraction | None = None
    seconds: Fraction | None = None

    def in_samples(self, rate_hz: Fraction) -> Fraction:
        """The amount in samples at ``rate_hz``; exact, not yet rounded."""
        if self.samples is not None:
            return self.samples
        assert self.seconds is not None
        return self.seconds * rate_hz


@dataclass(frozen=True)
class Band:
    """What a response must do between two frequencies.

    Attributes:
        low_hz, high_hz: the edges; ``low_hz`` is 0 where the spec states none,
            ``high_hz`` is None where it states none (up to half the rate).
        gain: the wanted magnitude, linear, at least 0.
        tolerance: in dB (``decibels`` true: for gain > 0, |20 lg(|H|/gain)| <= tolerance;
            for gain 0, 20 lg|H| <= tolerance, negative) or a linear deviation from gain.
        decibels: which of the two.
        place: where the band stands in the spec.
    """

    low_hz: float
    high_hz: float | None
    gain: float
    tolerance: float
    decibels: bool
    place: Place | None = field(default=None, compare=False)


@dataclass(frozen=True)
class Missing:
    """The policy for missing samples; ``bridge_samples`` is 0 unless it is bridge."""

    policy: Literal["refuse", "spread", "bridge"] = "refuse"
    bridge: Amount | None = None


@dataclass(frozen=True)
class Channels:
    """Which channels of one dimension are kept, by label, in this order."""

    dimension: str
    keep: tuple[str | int | float, ...]


@dataclass(frozen=True)
class Signal:
    """One variable of the source, and how its samples are to be read."""

    name: str
    variable: str
    time: str
    rate_hz: Fraction
    rate_text: str
    unit: str | None = None
    channels: Channels | None = None
    breaks: Literal["refuse", "split"] = "refuse"
    missing: Missing = Missing()
    infinite: Literal["refuse", "missing"] = "refuse"
    rate_tolerance: Fraction = Fraction(100, 1_000_000)
    place: Place | None = field(default=None, compare=False)


@dataclass(frozen=True)
class Filter:
    """One filter as the spec states it, before it is designed.

    Attributes:
        name: its name in the spec.
        method: its method, a key of the registry of methods.
        settings: the method's own keys, converted: a frequency is a `Fraction` in Hz,
            a length an `Amount`, a number an int or float, a word a str, a list a tuple.
        bands: tolerances, which drive the design or are a claim that is checked.
        settle: the share of the sum of |h| under which a restarted recursion counts.
        places: where each key stands; key "" is the filter itself.
    """

    name: str
    method: str
    settings: Mapping[str, object]
    bands: tuple[Band, ...] = ()
    settle: float = 1e-3
    places: Mapping[str, Place] = field(default_factory=dict, compare=False)

    def place(self, key: str = "") -> str:
        """``file:line:column`` of a key, or of the filter where the key is absent."""
        found = self.places.get(key) or self.places.get("")
        return str(found) if found else f"filter {self.name}"


@dataclass(frozen=True)
class Result:
    """One result: a signal through a chain of filters."""

    name: str
    signal: str
    through: tuple[str, ...]
    timing: Timing
    ends: Ends
    bands: tuple[Band, ...] = ()
    keep_as: Precision | None = None
    chunks: Mapping[str, int] | None = None
    title: str | None = None
    place: Place | None = field(default=None, compare=False)


@dataclass(frozen=True)
class Blocks:
    """How samples are grouped into transforms; part of the numbers."""

    hop: Amount | None = None  # None: auto
    latency: Amount | None = None
    precision: Precision = "float64"
    place: Place | None = field(default=None, compare=False)


@dataclass(frozen=True)
class Spec:
    """A checked spec. ``text`` is the YAML it came from, kept whole."""

    text: str
    file: str
    title: str
    signals: Mapping[str, Signal]
    filters: Mapping[str, Filter]
    results: Mapping[str, Result]
    blocks: Blocks
    notes: str | None = None
    warnings: tuple[str, ...] = ()
