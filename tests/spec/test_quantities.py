"""Quantities: exact, in any usual spelling, and refused with the unit that was likely meant."""

from __future__ import annotations

import contextlib
from fractions import Fraction

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from pipeline_filters.errors import CommandLineError
from pipeline_filters.spec import Amount
from pipeline_filters.spec.quantities import (
    USUAL_UNITS,
    UnreadableQuantityError,
    bare_number,
    decibels,
    duration_seconds,
    frequency_hz,
    hop,
    length,
    parse_bytes,
    pint_factor,
    positive_frequency_hz,
    proportion,
)


@pytest.mark.parametrize(
    ("family", "word"), [(family, word) for family, words in USUAL_UNITS.items() for word in words]
)
def test_the_table_of_units_is_what_pint_says(family, word):
    assert pint_factor(word, family) == USUAL_UNITS[family][word]


@pytest.mark.parametrize(
    ("text", "hz"),
    [
        ("50 Hz", 50),
        ("1 kHz", 1000),
        ("1e3Hz", 1000),
        ("2 / day", Fraction(2, 86400)),
        ("2 per day", Fraction(2, 86400)),
        ("1/s", 1),
        ("0.1 mHz", Fraction(1, 10_000)),
        ("3 kilohertz", 3000),  # not in the table: by pint
        ("1 / fortnight", Fraction(1, 14 * 86400)),
    ],
)
def test_frequencies_are_exact(text, hz):
    assert positive_frequency_hz(text) == hz


@pytest.mark.parametrize(
    ("text", "seconds"),
    [("20 ms", Fraction(1, 50)), ("10 min", 600), ("1.5 h", 5400), ("7 µs", Fraction(7, 10**6))],
)
def test_durations_are_exact(text, seconds):
    assert duration_seconds(text) == seconds


def test_lengths_count_samples_or_time():
    assert length("5 samples") == Amount("5 samples", samples=Fraction(5))
    assert length(" 20 ms") == Amount("20 ms", seconds=Fraction(1, 50))
    assert hop("auto") is None
    assert hop("1 sample") == Amount("1 sample", samples=Fraction(1))


def test_levels_and_proportions():
    assert decibels("-60 dB") == -60
    assert decibels("0.1dB") == 0.1
    assert proportion("100 ppm") == Fraction(1, 10_000)
    assert proportion("0.1 %") == proportion("0.1 percent") == Fraction(1, 1000)


@pytest.mark.parametrize(
    ("text", "count"), [("512 MiB", 512 << 20), ("1.5 GiB", 3 << 29), ("2 GB", 2 * 10**9)]
)
def test_bytes(text, count):
    assert parse_bytes(text) == count


@pytest.mark.parametrize("text", ["512", "512 MHz", "-1 GiB", "0.5 B", "much", "nan GiB", ""])
def test_other_text_is_no_amount_of_memory(text):
    with pytest.raises(CommandLineError) as caught:
        parse_bytes(text)
    (problem,) = caught.value.problems
    assert problem.where == "--memory"
    assert "512 MiB" in problem.allowed


@pytest.mark.parametrize(
    ("read", "text", "found", "remedy"),
    [
        (positive_frequency_hz, "50", "50, a number without a unit", "write 50 Hz if"),
        (length, "5", "5, a number without a unit", "write 5 samples if"),
        (duration_seconds, "10", "10, a number without a unit", "write 10 s if"),
        (proportion, "100", "100, a number without a unit", "write 100 ppm if"),
        (decibels, "-60", "-60, a number without a unit", "write -60 dB if"),
        (frequency_hz, "50 hz", "50 hz, with the unit hz", "did you mean Hz?"),
        (frequency_hz, "50 kHzz", "50 kHzz, with the unit kHzz", "did you mean kHz?"),
        (frequency_hz, "20 ms", "20 ms, with the unit ms", ""),
        (length, "20 mm", "20 mm, with the unit mm", ""),
        (length, "2.5 samples", "2.5 samples", ""),
        (length, "0 samples", "0 samples", ""),
        (duration_seconds, "1 month", "1 month, with the unit month", "months and years"),
        (duration_seconds, "2 years", "2 years, with the unit years", "months and years"),
        (duration_seconds, "/ day", "/ day", "begin with a plain number"),
        (frequency_hz, "-50 Hz", "-50 Hz, which is negative", ""),
        (positive_frequency_hz, "0 Hz", "0 Hz", ""),
        (frequency_hz, "nan Hz", "nan Hz, which is no finite number", ""),
        (frequency_hz, "-inf Hz", "-inf Hz, which is no finite number", ""),
        (frequency_hz, "1,000 Hz", "1,000 Hz, with the unit ,000 Hz", ""),
        (frequency_hz, "fast", "fast", "begin with a plain number"),
        (frequency_hz, "", "an empty text", ""),
        (frequency_hz, "1e999999999 Hz", "1e999999999 Hz", ""),
        (frequency_hz, "1" * 5000 + " Hz", "1" * 57 + "...", ""),
        (hop, "atuo", "atuo", "did you mean auto?"),
        (decibels, "-60 db", "-60 db, with the unit db", "did you mean dB?"),
        (decibels, "1e6 dB", "1e6 dB", ""),
        (proportion, "100 %", "100 %", ""),
    ],
)
def test_refusals_say_what_is_meant(read, text, found, remedy):
    with pytest.raises(UnreadableQuantityError) as caught:
        read(text)
    assert caught.value.found == found
    assert caught.value.remedy.startswith(remedy)
    assert caught.value.allowed


@pytest.mark.parametrize("unit", ["rpm", "rad/s", "Bq", "cps", "degC", "c", "year", "1/s", "F"])
def test_units_that_look_like_frequencies_are_none(unit):
    with pytest.raises(UnreadableQuantityError):
        frequency_hz(f"2 {unit}")


def test_a_bare_number_names_the_likely_unit():
    assert bare_number("hop", "4096").remedy == "write 4096 samples if that is meant"


@settings(deadline=None, max_examples=100)
@given(
    st.decimals(min_value="0.000001", max_value=10**9, places=6),
    st.sampled_from(sorted(USUAL_UNITS["frequency"])),
)
def test_a_stated_number_is_kept_to_the_last_digit(number, unit):
    exact = Fraction(number) * USUAL_UNITS["frequency"][unit]
    assert positive_frequency_hz(f"{number} {unit}") == exact
    seconds = 1 / positive_frequency_hz(f"{number} {unit}")
    assert seconds * exact == 1


@settings(deadline=None, max_examples=300)
@given(st.one_of(st.text(max_size=30), st.from_regex(r"[-+0-9.e]{1,6} ?[/a-zA-Z%µ ]{0,12}")))
def test_any_text_is_a_quantity_or_refused(text):
    for read in (frequency_hz, duration_seconds, length, hop, decibels, proportion):
        with contextlib.suppress(UnreadableQuantityError):
            read(text)
