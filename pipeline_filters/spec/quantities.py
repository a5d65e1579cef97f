"""Quantities with units: exact values from text such as ``50 Hz``, ``2 / day``, ``512 MiB``.

What a unit is worth comes from pint. Loading it takes longer than all else that a spec needs,
so the factors of the usual spellings are kept in a table here, which the tests hold to pint,
and pint is asked about every other.
"""

from __future__ import annotations

import re
from collections.abc import Callable
from dataclasses import dataclass
from fractions import Fraction
from functools import cache
from typing import Any, Literal

from pipeline_filters.errors import CommandLineError, Problem
from pipeline_filters.spec.findings import nearest, shortened
from pipeline_filters.spec.model import Amount

Family = Literal["frequency", "time", "bytes", "proportion"]

_QUANTITY = re.compile(
    r"\s*(?P<number>[+-]?(?:[0-9]+\.?[0-9]*|\.[0-9]+)(?:[eE](?P<exponent>[+-]?[0-9]+))?)"
    r"\s*(?P<unit>.*?)\s*",
    re.DOTALL,
)
_UNIT = re.compile(r"(?P<per>/\s*|per\s+)?(?P<word>[^\W\d_]+|%)")
_NO_NUMBER = re.compile(r"\s*[+-]?\.?(nan|inf|infinity)\b", re.IGNORECASE)
_MOST_CHARACTERS = 40
_LARGEST_EXPONENT = 30
_LARGEST_DB = 1000

# In Hz, s, bytes and parts of the whole.
USUAL_UNITS: dict[Family, dict[str, Fraction]] = {
    "frequency": {
        "Hz": Fraction(1),
        "kHz": Fraction(1000),
        "MHz": Fraction(1000**2),
        "GHz": Fraction(1000**3),
        "mHz": Fraction(1, 1000),
        "uHz": Fraction(1, 1000**2),
    },
    "time": {
        **dict.fromkeys(("s", "sec", "second", "seconds"), Fraction(1)),
        **dict.fromkeys(("ms", "millisecond", "milliseconds"), Fraction(1, 1000)),
        **dict.fromkeys(("us", "µs", "microsecond", "microseconds"), Fraction(1, 1000**2)),
        **dict.fromkeys(("ns", "nanosecond", "nanoseconds"), Fraction(1, 1000**3)),
        **dict.fromkeys(("min", "minute", "minutes"), Fraction(60)),
        **dict.fromkeys(("h", "hr", "hour", "hours"), Fraction(3600)),
        **dict.fromkeys(("d", "day", "days"), Fraction(86400)),
        **dict.fromkeys(("week", "weeks"), Fraction(7 * 86400)),
    },
    "bytes": {
        **dict.fromkeys(("B", "byte", "bytes"), Fraction(1)),
        **{f"{letter}B": Fraction(1000**n) for n, letter in enumerate("kMGT", 1)},
        **{f"{letter}iB": Fraction(1024**n) for n, letter in enumerate("KMGT", 1)},
    },
    "proportion": {"%": Fraction(1, 100), "percent": Fraction(1, 100), "ppm": Fraction(1, 10**6)},
}
# Years and months have no fixed length, whatever mean length a units library gives them.
_UNEVEN_TIMES = ("year", "month", "decade", "century", "millennium", "eon")


class UnreadableQuantityError(ValueError):
    """Text that is not the quantity that is wanted; in parts as a problem has them."""

    def __init__(self, found: str, allowed: str, remedy: str = "") -> None:
        super().__init__(found, allowed, remedy)
        self.found = found
        self.allowed = allowed
        self.remedy = remedy


@dataclass(frozen=True)
class Kind:
    """A kind of quantity: how people call it, the unit most likely meant, how it is read."""

    allowed: str
    likely_unit: str
    read: Callable[[str], object]


def positive_frequency_hz(text: str) -> Fraction:
    """A frequency above 0, in Hz, exact.

    Raises:
        UnreadableQuantityError: it is not.
    """
    return _above_zero(text, _frequency(text, "positive-frequency"), "positive-frequency")


def frequency_hz(text: str) -> Fraction:
    """A frequency of at least 0, in Hz, exact.

    Raises:
        UnreadableQuantityError: it is not.
    """
    return _frequency(text, "frequency")


def duration_seconds(text: str) -> Fraction:
    """A time above 0, in seconds, exact.

    Raises:
        UnreadableQuantityError: it is not.
    """
    number, unit = _parts(text, "duration")
    factor = _factor(unit, "time")
    if factor is None:
        raise _foreign(text, unit, "duration", ("time",))
    return _above_zero(text, number * factor, "duration")


def length(text: str) -> Amount:
    """A length of time above 0: a whole number of samples, or a duration.

    Raises:
        UnreadableQuantityError: it is neither.
    """
    return _amount(text, "length")


def hop(text: str) -> Amount | None:
    """The distance between block starts; None for ``auto``.

    Raises:
        UnreadableQuantityError: it is neither ``auto`` nor a length.
    """
    return None if text == "auto" else _amount(text, "hop")


def decibels(text: str) -> float:
    """A level in dB, of either sign.

    Raises:
        UnreadableQuantityError: it is not.
    """
    number, unit = _parts(text, "decibels", signed=True)
    if unit != "dB":
        raise _foreign(text, unit, "decibels", ())
    if abs(number) > _LARGEST_DB:
        raise UnreadableQuantityError(shortened(text), f"a level within {_LARGEST_DB} dB")
    return float(number)


def proportion(text: str) -> Fraction:
    """A part of the whole, above 0 and below 1, exact.

    Raises:
        UnreadableQuantityError: it is not.
    """
    number, unit = _parts(text, "proportion")
    factor = _factor(unit, "proportion")
    if factor is None:
        raise _foreign(text, unit, "proportion", ("proportion",))
    value = _above_zero(text, number * factor, "proportion")
    if value >= 1:
        raise UnreadableQuantityError(shortened(text), KINDS["proportion"].allowed)
    return value


def parse_bytes(text: str, where: str = "--memory") -> int:
    """An amount of memory in bytes, such as ``512 MiB``; a part of a byte is cut off.

    Raises:
        CommandLineError: it is not one; the problem names ``where``.
    """
    try:
        number, unit = _parts(text, "bytes")
        factor = _factor(unit, "bytes")
        if factor is None:
            raise _foreign(text, unit, "bytes", ("bytes",))
        return int(_above_zero(text, number * factor // 1, "bytes"))
    except UnreadableQuantityError as error:
        raise CommandLineError(Problem(where, error.found, error.allowed, error.remedy)) from None


KINDS: dict[str, Kind] = {
    "positive-frequency": Kind(
        "a frequency above 0 with its unit, such as 50 Hz, 1 kHz or 2 / day",
        "Hz",
        positive_frequency_hz,
    ),
    "frequency": Kind(
        "a frequency with its unit, such as 50 Hz, 1 kHz or 2 / day", "Hz", frequency_hz
    ),
    "duration": Kind(
        "a time above 0 with its unit, such as 20 ms or 10 min", "s", duration_seconds
    ),
    "length": Kind(
        "a whole number of samples or a time, above 0, such as 5 samples or 20 ms",
        "samples",
        length,
    ),
    "hop": Kind("auto, or a length such as 4096 samples or 1 min", "samples", hop),
    "decibels": Kind("a level in dB, such as 0.1 dB or -60 dB", "dB", decibels),
    "proportion": Kind("a part above 0 and below 1, such as 100 ppm or 0.1 %", "ppm", proportion),
    "bytes": Kind("an amount of memory such as 512 MiB or 2 GiB", "MiB", parse_bytes),
}


def bare_number(kind: str, written: str) -> UnreadableQuantityError:
    """What to say of a number that stands where a quantity with a unit belongs."""
    unit = KINDS[kind].likely_unit
    return UnreadableQuantityError(
        f"{shortened(written)}, a number without a unit",
        KINDS[kind].allowed,
        f"write {shortened(written)} {unit} if that is meant",
    )


def _parts(text: str, kind: str, signed: bool = False) -> tuple[Fraction, str]:
    """The number, exact, and the unit's text."""
    match = _QUANTITY.fullmatch(text)
    allowed = KINDS[kind].allowed
    if _NO_NUMBER.match(text):
        raise UnreadableQuantityError(f"{shortened(text)}, which is no finite number", allowed)
    if match is None:
        close = nearest(text, ("auto",)) if kind == "hop" else None
        remedy = f"did you mean {close}?" if close else "begin with a plain number such as 1000"
        raise UnreadableQuantityError(shortened(text) or "an empty text", allowed, remedy)
    written, exponent = match["number"], match["exponent"] or "0"
    # The exact value of 1e999999999 would fill the memory.
    if len(written) > _MOST_CHARACTERS or abs(int(exponent)) > _LARGEST_EXPONENT:
        raise UnreadableQuantityError(
            shortened(text),
            f"a number of up to {_MOST_CHARACTERS} characters, with an exponent of up to "
            f"{_LARGEST_EXPONENT}",
        )
    number = Fraction(written)
    if not match["unit"]:
        raise bare_number(kind, text.strip())
    if number < 0 and not signed:
        raise UnreadableQuantityError(f"{shortened(text)}, which is negative", allowed)
    return number, match["unit"]


def _above_zero(text: str, value: Fraction | int, kind: str) -> Fraction:
    if value <= 0:
        raise UnreadableQuantityError(f"{shortened(text)}", KINDS[kind].allowed)
    return Fraction(value)


def _frequency(text: str, kind: str) -> Fraction:
    number, unit = _parts(text, kind)
    factor = _factor(unit, "frequency")
    if factor is None:
        raise _foreign(text, unit, kind, ("frequency",))
    return number * factor


def _amount(text: str, kind: str) -> Amount:
    number, unit = _parts(text, kind)
    if unit in ("samples", "sample"):
        if number.denominator != 1:
            raise UnreadableQuantityError(shortened(text), "a whole number of samples")
        return Amount(text.strip(), samples=_above_zero(text, number, kind))
    factor = _factor(unit, "time")
    if factor is None:
        raise _foreign(text, unit, kind, ("time",), ("samples",))
    return Amount(text.strip(), seconds=_above_zero(text, number * factor, kind))


def _foreign(
    text: str, unit: str, kind: str, families: tuple[Family, ...], others: tuple[str, ...] = ()
) -> UnreadableQuantityError:
    """What to say of a unit that does not belong."""
    valid = [word for family in families for word in USUAL_UNITS[family]]
    close = nearest(unit, [*valid, *others] or ["dB"])
    named = re.sub(r"^per\s+|^/\s*", "", unit).rstrip("s")
    if named in _UNEVEN_TIMES:
        remedy = "months and years have no fixed length: use days"
    elif close is not None:
        remedy = f"did you mean {close}?"
    else:
        remedy = f"state it in {KINDS[kind].likely_unit}"
    return UnreadableQuantityError(
        f"{shortened(text)}, with the unit {shortened(unit, 30)}", KINDS[kind].allowed, remedy
    )


def _factor(unit: str, family: Family) -> Fraction | None:
    """What a unit is worth in the base of its family; None where it is no unit of it."""
    match = _UNIT.fullmatch(unit)
    if match is None:
        return None
    word = match["word"]
    if match["per"] is not None:
        if family != "frequency":
            return None
        seconds = _factor(word, "time")
        return None if seconds is None else 1 / seconds
    usual = USUAL_UNITS[family].get(word)
    return usual if usual is not None else pint_factor(word, family)


@cache
def _registry() -> Any:
    import pint

    return pint.UnitRegistry(non_int_type=Fraction)


@cache
def pint_factor(word: str, family: Family) -> Fraction | None:
    """What pint says a unit is worth in Hz, s, bytes or parts of the whole.

    None where the word is no unit of this family. Angles count as no unit in pint, so that it
    would take ``rpm`` and ``rad/s`` as Hz: a frequency's unit must be named hertz.
    """
    if len(word) > _MOST_CHARACTERS:
        return None
    registry = _registry()
    try:
        units = registry.parse_units(word)
        names = list(dict(registry.Quantity(1, units).unit_items()))
        if len(names) != 1:
            return None
        value = registry.Quantity(Fraction(1), units).to_root_units()
    except Exception:  # pint raises many kinds here, also from inside its own messages
        return None
    (name,) = names
    roots = dict(value.unit_items())
    belongs = {
        "frequency": name.endswith("hertz"),
        "time": roots == {"second": 1} and not name.endswith(_UNEVEN_TIMES),
        "bytes": name.endswith("byte"),
        "proportion": name in ("percent", "ppm", "permille"),
    }[family]
    if not belongs or not isinstance(value.magnitude, Fraction):
        return None
    return value.magnitude / 8 if family == "bytes" else value.magnitude
