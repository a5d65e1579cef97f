"""Dates as counts of days, in the proleptic Gregorian and in the mixed calendar."""

from __future__ import annotations

# The mixed calendar goes from Thursday 4 October (Julian) to Friday 15 October (Gregorian).
_LAST_JULIAN = (1582, 10, 4)
_FIRST_GREGORIAN = (1582, 10, 15)
_DAYS = (31, 28, 31, 30, 31, 30, 31, 31, 30, 31, 30, 31)


def days_from_1970(year: int, month: int, day: int, *, mixed: bool) -> int | None:
    """Days from 1970-01-01 (Gregorian) to a date; None where the calendar has no such date.

    By the Julian day number (E. G. Richards 2013, in the Explanatory Supplement to the
    Astronomical Almanac, 3rd edition, section 15.11; the formula is from memory).

    Args:
        year: astronomical, so that the year before 1 is 0.
        mixed: Julian up to 4 October 1582 and Gregorian from 15 October; else Gregorian always.
    """
    julian = mixed and (year, month, day) <= _LAST_JULIAN
    if mixed and not julian and (year, month, day) < _FIRST_GREGORIAN:
        return None
    if not 1 <= month <= 12:
        return None
    leap = year % 4 == 0 and (julian or year % 100 != 0 or year % 400 == 0)
    if not 1 <= day <= _DAYS[month - 1] + (leap and month == 2):
        return None
    early = (14 - month) // 12
    years = year + 4800 - early
    months = month + 12 * early - 3
    number = day + (153 * months + 2) // 5 + 365 * years + years // 4
    number += -32_083 if julian else -(years // 100) + years // 400 - 32_045
    return number - 2_440_588
