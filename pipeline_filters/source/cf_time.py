"""CF time units and stamps as integer nanoseconds, exactly where the stamps are integers."""

from __future__ import annotations

import re
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

Kind = Literal["stamped", "elapsed"]

UNIT_NS = {
    **dict.fromkeys(("nanoseconds", "nanosecond", "nanosec", "nsec", "nsecs", "ns"), 1),
    **dict.fromkeys(("microseconds", "microsecond", "microsec", "usec", "us", "µs"), 1_000),
    **dict.fromkeys(("milliseconds", "millisecond", "millisec", "msec", "msecs", "ms"), 10**6),
    **dict.fromkeys(("seconds", "second", "sec", "secs", "s"), 10**9),
    **dict.fromkeys(("minutes", "minute", "mins", "min"), 60 * 10**9),
    **dict.fromkeys(("hours", "hour", "hrs", "hr", "h"), 3600 * 10**9),
    **dict.fromkeys(("days", "day", "d"), 86_400 * 10**9),
    **dict.fromkeys(("weeks", "week"), 7 * 86_400 * 10**9),
}

_GREGORIAN_FROM = (1582, 10, 15)
_EPOCH = re.compile(
    r"(?P<year>[+-]?\d{1,5})-(?P<month>\d{1,2})-(?P<day>\d{1,2})"
    r"(?:[T\s]\s*(?P<hour>\d{1,2})(?::(?P<minute>\d{1,2}))?(?::(?P<second>\d{1,2})(?:\.(?P<part>\d*))?)?)?"
    r"\s*(?P<zone>Z|UTC|GMT|[+-]\d{1,2}(?::?\d{2})?)?"
)


class TimeUnitError(ValueError):
    """Units that stamps cannot be read in; the message says what was found and allowed."""


@dataclass(frozen=True)
class TimeUnits:
    """How raw stamps become nanoseconds.

    Attributes:
        kind: stamped where the units name an epoch, elapsed where they do not.
        unit_ns: nanoseconds in one unit.
        epoch_ns: nanoseconds from 1970-01-01 UTC to the epoch; 0 for elapsed.
    """

    kind: Kind
    unit_ns: int
    epoch_ns: int

    @classmethod
    def parse(cls, units: str, calendar: str = "standard") -> TimeUnits:
        """Reads a CF units attribute.

        Raises:
            TimeUnitError: a unit, epoch or calendar that is not understood.
        """
        word, _, epoch = units.strip().partition(" since ")
        unit_ns = UNIT_NS.get(word.strip()) or UNIT_NS.get(word.strip().lower())
        if unit_ns is None:
            raise TimeUnitError(
                f"time unit {word.strip()!r}; from nanoseconds to weeks are allowed "
                "(months and years have no fixed length)"
            )
        if not epoch:
            return cls("elapsed", unit_ns, 0)
        if calendar.lower() not in ("standard", "gregorian", "proleptic_gregorian"):
            raise TimeUnitError(
                f"calendar {calendar!r}; standard, gregorian and proleptic_gregorian are allowed"
            )
        return cls("stamped", unit_ns, _epoch_ns(epoch.strip(), calendar.lower()))

    def resolution_ns(self, raw: NDArray[Any], step_ns: float) -> float:
        """How coarse the stamps are, beside a step of ``step_ns``.

        Integers that can count the step exactly add nothing.
        """
        if raw.dtype.kind == "f":
            largest = float(np.max(np.abs(raw), initial=0))
            return float(np.spacing(np.asarray(largest, raw.dtype))) * self.unit_ns + 1
        return 0.0 if step_ns % self.unit_ns == 0 else float(self.unit_ns)

    def to_ns(self, raw: NDArray[Any]) -> NDArray[np.int64]:
        """Raw stamps as int64 nanoseconds (since 1970 or since 0).

        Integers exactly; floats rounded half to even.

        Raises:
            TimeUnitError: a stamp that is missing, or outside the years 1678 to 2262.
        """
        if raw.dtype.kind == "f" and not np.isfinite(raw).all():
            raise TimeUnitError("a stamp that is missing or infinite; every sample needs one")
        rough = raw.astype(np.float64) * self.unit_ns + self.epoch_ns
        if raw.size and max(abs(float(rough.min())), abs(float(rough.max()))) > 9.2e18:
            raise TimeUnitError("a stamp outside the years 1678 to 2262")
        if raw.dtype.kind == "f":
            whole = np.floor(raw)
            within = np.rint((raw - whole).astype(np.float64) * self.unit_ns).astype(np.int64)
            stamps: NDArray[np.int64] = self._shift(whole.astype(np.int64)) + within
            return stamps
        return self._shift(raw.astype(np.int64))

    def _shift(self, whole: NDArray[np.int64]) -> NDArray[np.int64]:
        # Modulo 2^64: a product may pass the range although the sum, checked above, does not.
        epoch = np.uint64(self.epoch_ns % 2**64)
        shifted: NDArray[np.int64] = (whole.view(np.uint64) * np.uint64(self.unit_ns) + epoch).view(
            np.int64
        )
        return shifted


def _epoch_ns(text: str, calendar: str) -> int:
    found = _EPOCH.fullmatch(text)
    if not found:
        raise TimeUnitError(f"epoch {text!r}; a date such as 1970-01-01 00:00:00 is allowed")
    year, month, day = (int(found[part]) for part in ("year", "month", "day"))
    hour, minute, second = (int(found[part] or 0) for part in ("hour", "minute", "second"))
    if not (1 <= month <= 12 and 1 <= day <= 31 and hour < 24 and minute < 60 and second < 60):
        raise TimeUnitError(f"epoch {text!r}, which is no date")
    julian = calendar != "proleptic_gregorian" and (year, month, day) < _GREGORIAN_FROM
    days = _days_from_1970(year, month, day, julian=julian)
    fraction = int((found["part"] or "").ljust(9, "0")[:9] or 0)
    offset = _zone_seconds(found["zone"] or "Z")
    return ((days * 86_400 + hour * 3600 + minute * 60 + second - offset) * 10**9) + fraction


def _zone_seconds(zone: str) -> int:
    if zone in ("Z", "UTC", "GMT"):
        return 0
    digits = zone[1:].replace(":", "")
    hours, minutes = (int(digits), 0) if len(digits) <= 2 else (int(digits[:-2]), int(digits[-2:]))
    return (hours * 3600 + minutes * 60) * (-1 if zone[0] == "-" else 1)


def _days_from_1970(year: int, month: int, day: int, *, julian: bool) -> int:
    """Days from 1970-01-01 by the Julian day number (Richards 2013, in the Explanatory
    Supplement to the Astronomical Almanac, section 15.11; the formula is from memory)."""
    a = (14 - month) // 12
    y = year + 4800 - a
    m = month + 12 * a - 3
    number = day + (153 * m + 2) // 5 + 365 * y + y // 4
    number += -32_083 if julian else -(y // 100) + y // 400 - 32_045
    return number - 2_440_588


def stamp_text(stamp_ns: int, kind: str) -> str:
    """A stamp for people: ISO 8601 in UTC, or seconds since the start."""
    if kind == "stamped":
        text = str(np.datetime64(stamp_ns, "ns"))
        return text.rstrip("0").rstrip(".") if "." in text else text
    return f"{stamp_ns / 1e9:.9g} s"
