"""CF time units and stamps as integer nanoseconds, exactly where the stamps are integers."""

from __future__ import annotations

import re
from dataclasses import dataclass, replace
from fractions import Fraction
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from pipeline_filters.source.calendars import days_from_1970

Kind = Literal["stamped", "elapsed"]

UNIT_NS = {
    **dict.fromkeys(("nanoseconds", "nanosecond", "nanosec", "nanosecs", "nsec", "nsecs", "ns"), 1),
    **dict.fromkeys(("microseconds", "microsecond", "microsec", "microsecs"), 1000),
    **dict.fromkeys(("usec", "usecs", "us", "µs", "μs"), 1000),
    **dict.fromkeys(("milliseconds", "millisecond", "millisec", "millisecs"), 10**6),
    **dict.fromkeys(("msec", "msecs", "ms"), 10**6),
    **dict.fromkeys(("seconds", "second", "sec", "secs", "s"), 10**9),
    **dict.fromkeys(("minutes", "minute", "mins", "min"), 60 * 10**9),
    **dict.fromkeys(("hours", "hour", "hrs", "hr", "h"), 3600 * 10**9),
    **dict.fromkeys(("days", "day", "d"), 86_400 * 10**9),
    **dict.fromkeys(("weeks", "week"), 7 * 86_400 * 10**9),
}
_NUMPY_UNITS = {"m": "min", "D": "day", "W": "week"}
_NO_TIME = -(2**63)  # what numpy holds for a datetime that is none

CALENDARS = ("standard", "gregorian", "proleptic_gregorian")
_SINCE = re.compile(r"\s+since\s+", re.IGNORECASE)
_EPOCH = re.compile(
    r"(?P<year>[+-]?\d{1,5})-(?P<month>\d{1,2})-(?P<day>\d{1,2})"
    r"(?:[T\s]\s*(?P<hour>\d{1,2})"
    r"(?::(?P<minute>\d{1,2})(?::(?P<second>\d{1,2})(?:\.(?P<part>\d*))?)?)?)?"
    r"\s*(?P<zone>Z|UTC|GMT|[+-]\d{1,2}(?::?\d{2})?)?",
    re.IGNORECASE,
)


class TimeUnitError(ValueError):
    """Units that stamps cannot be read in, or a stamp that is none.

    Attributes:
        found, allowed, remedy: as in a `pipeline_filters.errors.Problem`.
        at: position of the stamp among those given, None where it is not about one stamp.
    """

    def __init__(self, found: str, allowed: str, remedy: str = "", at: int | None = None) -> None:
        super().__init__(f"{found}; {allowed}")
        self.found, self.allowed, self.remedy, self.at = found, allowed, remedy, at


@dataclass(frozen=True)
class TimeUnits:
    """How raw stamps become nanoseconds.

    Attributes:
        kind: stamped where the units name an epoch, elapsed where they do not.
        unit_ns: nanoseconds in one unit.
        epoch_ns: nanoseconds from 1970-01-01 UTC to the epoch; 0 for elapsed.
        markers: raw values that stand for a missing stamp.
    """

    kind: Kind
    unit_ns: int
    epoch_ns: int
    markers: tuple[float, ...] = ()

    @classmethod
    def parse(cls, units: str, calendar: str = "standard") -> TimeUnits:
        """Reads a CF units attribute.

        Raises:
            TimeUnitError: a unit, epoch or calendar that is not understood.
        """
        word, *epoch = _SINCE.split(units.strip(), maxsplit=1)
        unit_ns = UNIT_NS.get(word) or UNIT_NS.get(word.lower())
        if unit_ns is None:
            raise TimeUnitError(
                f"time unit {word!r}",
                "nanoseconds, microseconds, milliseconds, seconds, minutes, hours, days or weeks "
                "(months and years have no fixed length)",
                "store the stamps in one of these units",
            )
        if not epoch:
            return cls("elapsed", unit_ns, 0)
        if calendar.lower() not in CALENDARS:
            raise TimeUnitError(
                f"calendar {calendar!r}",
                f"{', '.join(CALENDARS[:-1])} or {CALENDARS[-1]}",
                "store the stamps in the calendar that clocks follow",
            )
        return cls("stamped", unit_ns, _epoch_ns(epoch[0], calendar.lower()))

    @classmethod
    def of_datetimes(cls, dtype: np.dtype[Any]) -> TimeUnits:
        """The units of a numpy datetime64 or timedelta64 type.

        Raises:
            TimeUnitError: months, years, or finer than nanoseconds.
        """
        unit, count = np.datetime_data(dtype)
        unit_ns = UNIT_NS.get(_NUMPY_UNITS.get(unit, unit))
        if unit_ns is None:
            raise TimeUnitError(
                f"stamps of type {dtype}",
                "units from ns to weeks",
                "store the stamps in one of these units",
            )
        kind: Kind = "stamped" if dtype.kind == "M" else "elapsed"
        return cls(kind, unit_ns * count, 0, (_NO_TIME,))

    def with_markers(self, markers: tuple[float, ...]) -> TimeUnits:
        """The same units, where these raw values stand for a missing stamp."""
        return replace(self, markers=markers)

    def resolution_ns(self, ends: NDArray[Any], step_ns: Fraction) -> Fraction:
        """How coarse raw stamps are, beside a step of ``step_ns``.

        Integers that count the step exactly add nothing; floats are as coarse as the largest
        of them.

        Args:
            ends: the first and the last raw stamp.
        """
        if ends.dtype.kind == "f":
            present = np.isfinite(ends) & ~np.isin(ends, self.markers)
            largest = np.max(np.abs(ends[present]), initial=0)
            spacing = float(np.spacing(np.asarray(largest, ends.dtype)))
            return Fraction(spacing) * self.unit_ns + 1
        return Fraction(0 if step_ns % self.unit_ns == 0 else self.unit_ns)

    def to_ns(self, raw: NDArray[Any]) -> NDArray[np.int64]:
        """Raw stamps as int64 nanoseconds (since 1970, or since 0 for elapsed).

        Integers exactly; floats exactly too, and then rounded half to even.

        Args:
            raw: shape (samples,), integers, floats, datetime64 or timedelta64.

        Raises:
            TimeUnitError: a stamp that is missing, or outside what 64 bits of nanoseconds hold.
        """
        raw = numbers_of(raw)
        self._refuse_missing(raw)
        self._refuse_far(raw)
        if raw.dtype.kind == "f":
            return self._floats_to_ns(raw.astype(np.float64, copy=False))
        return self._shifted(raw.astype(np.int64))

    def one_to_ns(self, raw: float | int) -> int:
        """One finite raw stamp, exactly and without a limit; floats rounded half to even."""
        exact = Fraction(raw) * self.unit_ns + self.epoch_ns
        return round(exact)

    def _refuse_missing(self, raw: NDArray[Any]) -> None:
        missing = ~np.isfinite(raw) if raw.dtype.kind == "f" else None
        for marker in self.markers:
            found = raw == marker
            missing = found if missing is None else missing | found
        if missing is not None and missing.any():
            raise TimeUnitError(
                "a missing stamp",
                "one stamp for every sample",
                "give the sample its stamp, or take the sample out of the source",
                int(missing.argmax()),
            )

    def _refuse_far(self, raw: NDArray[Any]) -> None:
        if not raw.size:
            return
        for at in (int(raw.argmin()), int(raw.argmax())):
            stamp = raw[at].item()
            # Whole units must fit as well; those of integers, wrapped, still add up.
            whole_fits = raw.dtype.kind != "f" or abs(stamp) < 2**63
            if not (whole_fits and -(2**63) < self.one_to_ns(stamp) < 2**63):
                raise TimeUnitError(
                    f"stamp {stamp!r}",
                    "the years 1678 to 2262"
                    if self.kind == "stamped"
                    else "durations up to 292 years",
                    "mend the stamp, or the units of the time coordinate",
                    at,
                )

    def _floats_to_ns(self, raw: NDArray[np.float64]) -> NDArray[np.int64]:
        whole = np.trunc(raw)
        part = raw - whole  # exact
        scaled = part * self.unit_ns
        within = np.rint(scaled)
        base = self._shifted(whole.astype(np.int64))
        stamps: NDArray[np.int64] = base + within.astype(np.int64)
        # The product was rounded, which matters to the last rounding only where it then lies
        # half-way: elsewhere it is further from half-way than its own rounding reaches.
        ties = np.flatnonzero(np.abs(scaled - within) == 0.5)
        if ties.size:
            low = np.floor(scaled[ties])
            rest = _product_rest(part[ties], float(self.unit_ns), scaled[ties])
            lower = base[ties] + low.astype(np.int64)
            stamps[ties] = lower + ((rest > 0) | ((rest == 0) & ((lower & 1) == 1)))
        return stamps

    def _shifted(self, whole: NDArray[np.int64]) -> NDArray[np.int64]:
        """whole * unit + epoch, on an array of our own.

        Modulo 2^64: a product may pass the range although the sum does not.
        """
        if self.unit_ns != 1:
            whole *= self.unit_ns
        if self.epoch_ns:
            whole.view(np.uint64)[...] += np.uint64(self.epoch_ns % 2**64)
        return whole


def numbers_of(raw: NDArray[Any]) -> NDArray[Any]:
    """Stamps as plain numbers: datetimes as their counts; in the machine's byte order."""
    if raw.dtype.kind in "mM":
        raw = raw.view(np.dtype(np.int64).newbyteorder(raw.dtype.byteorder))
    return raw if raw.dtype.isnative else raw.astype(raw.dtype.newbyteorder("="))


def _product_rest(
    left: NDArray[np.float64], right: float, product: NDArray[np.float64]
) -> NDArray[np.float64]:
    """left * right - product, exactly (T. J. Dekker 1971, A floating-point technique for
    extending the available precision, Numerische Mathematik 18; from memory)."""
    split = 2.0**27 + 1

    def halves(value: Any) -> tuple[Any, Any]:
        big = value * split
        high = big - (big - value)
        return high, value - high

    left_high, left_low = halves(left)
    right_high, right_low = halves(right)
    rest: NDArray[np.float64] = left_low * right_low - (
        ((product - left_high * right_high) - left_low * right_high) - left_high * right_low
    )
    return rest


def _epoch_ns(text: str, calendar: str) -> int:
    found = _EPOCH.fullmatch(text.strip())
    example = "a date such as 1970-01-01 00:00:00"
    if not found:
        raise TimeUnitError(f"epoch {text!r}", example, "write the epoch so")
    year, month, day = (int(found[part]) for part in ("year", "month", "day"))
    hour, minute, second = (int(found[part] or 0) for part in ("hour", "minute", "second"))
    days = days_from_1970(year, month, day, mixed=calendar != "proleptic_gregorian")
    if days is None or hour > 23 or minute > 59 or second > 59:
        raise TimeUnitError(
            f"epoch {text!r}, which the calendar does not have", example, "mend the epoch"
        )
    digits = (found["part"] or "").rstrip("0")
    if len(digits) > 9:
        raise TimeUnitError(f"epoch {text!r}, finer than a nanosecond", example, "round the epoch")
    offset = _zone_seconds((found["zone"] or "Z").upper())
    seconds = days * 86_400 + hour * 3600 + minute * 60 + second - offset
    return seconds * 10**9 + int(digits.ljust(9, "0"))


def _zone_seconds(zone: str) -> int:
    if zone in ("Z", "UTC", "GMT"):
        return 0
    digits = zone[1:].replace(":", "")
    hours, minutes = (int(digits), 0) if len(digits) <= 2 else (int(digits[:-2]), int(digits[-2:]))
    return (hours * 3600 + minutes * 60) * (-1 if zone[0] == "-" else 1)


def stamp_text(stamp_ns: int, kind: str) -> str:
    """A stamp for people: ISO 8601 in UTC, or seconds since the start."""
    if kind == "stamped":
        text = str(np.datetime64(stamp_ns, "ns"))
        return text.rstrip("0").rstrip(".") if "." in text else text
    whole, part = divmod(abs(stamp_ns), 10**9)
    sign = "-" if stamp_ns < 0 else ""
    return f"{sign}{whole}.{part:09d}".rstrip("0").rstrip(".") + " s"
