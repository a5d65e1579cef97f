"""Strict YAML: what is taken, and where each fault is told to be."""

from __future__ import annotations

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from weir_spec import SOUND, read, refused

from pipeline_filters.errors import SpecError
from pipeline_filters.spec.findings import Findings
from pipeline_filters.spec.reader import MOST_BYTES, MOST_DEPTH, read_tree
from pipeline_filters.spec.scalars import UnusableNumberError, core_value
from pipeline_filters.spec.tree import Node


def tree(text: str | bytes) -> Node:
    findings = Findings()
    root = read_tree(text, "weir.yaml", findings)
    findings.refuse()
    assert root is not None
    return root


def faults(text: str | bytes) -> list[str]:
    findings = Findings()
    read_tree(text, "weir.yaml", findings)
    with pytest.raises(SpecError) as caught:
        findings.refuse()
    return str(caught.value).splitlines()


@pytest.mark.parametrize(
    ("text", "value"),
    [
        # YAML 1.2.2, section 10.3.2: the core schema's tag resolution.
        ("null", None),
        ("~", None),
        ("true", True),
        ("False", False),
        ("12", 12),
        ("-19", -19),
        ("0o7", 7),
        ("0x3A", 58),
        ("0.", 0.0),
        (".5", 0.5),
        ("+12e03", 12000.0),
        ("-2E+05", -200000.0),
        ("1e3", 1000.0),
        # Types of YAML 1.1 that the core schema takes as text.
        ("off", "off"),
        ("yes", "yes"),
        ("12:30", "12:30"),
        ("1_000", "1_000"),
        ("2024-05-01", "2024-05-01"),
        ("010", 10),
    ],
)
def test_scalars_have_the_core_types(text, value):
    found = core_value(text)
    assert found == value
    assert type(found) is type(value)


@pytest.mark.parametrize("text", [".nan", ".inf", "-.Inf", "1e999", "9" * 5000])
def test_numbers_that_are_none_are_refused(text):
    with pytest.raises(UnusableNumberError):
        core_value(text)


def test_quoted_numbers_are_text():
    assert tree("a: '5'\nb: \"true\"\n").plain() == {"a": "5", "b": "true"}


def test_places_point_at_values_or_at_their_keys():
    root = tree("a:\n  b: 5\n  c: [x, {d: 1}]\n  e:\n  - f\n")
    places = {
        ("a",): (1, 1),  # the value begins on the next line: its key
        ("a", "b"): (2, 6),
        ("a", "c", 1, "d"): (3, 14),
        ("a", "e"): (4, 3),
        ("a", "e", 0): (5, 5),
    }
    found = {path: (root.at(path).place.line, root.at(path).place.column) for path in places}
    assert found == places


def test_columns_count_characters_not_bytes():
    assert faults("\u00e4\u00f6: .nan\n")[0].startswith("weir.yaml:1:5: .nan")


@pytest.mark.parametrize(
    ("text", "told"),
    [
        ("a: 1\nb:\t2\n", ["weir.yaml:2:3: a tab"]),
        ("a: 1\na: 2\na: 3\n", ["weir.yaml:2:1: a once more", "weir.yaml:3:1: a once more"]),
        ("a: &x 1\nb: *x\n", ["weir.yaml:1:4: an anchor &x", "weir.yaml:2:4: an alias *x"]),
        ("a: !!str 1\n", ["weir.yaml:1:4: a tag"]),
        ("5: a\ntrue: b\n", ["weir.yaml:1:1: 5 as a key", "weir.yaml:2:1: true as a key"]),
        ("? [a, b]\n: c\n", ["weir.yaml:1:3: a list as a key"]),
        ("?\n: a\n", ["weir.yaml:1:2: nothing as a key"]),
        ("a: 1\n---\nb: 1\n", ["weir.yaml:2:1: a second document"]),
        ("%YAML 1.1\n---\na: 1\n", ["weir.yaml:1:1: a % directive"]),
        ("", ["weir.yaml:1:1: nothing in it"]),
        ("# only a remark\n", ["weir.yaml:1:1: nothing in it"]),
        ("null\n", ["weir.yaml:1:1: nothing in it"]),
        ("a: [1, 2\n", ["weir.yaml:1:4: not readable as YAML: a list [...] that is not closed"]),
        ("a: b: c\n", ["weir.yaml:1:5: not readable as YAML: a second ': '"]),
        ("a: 'b\n", ["weir.yaml:1:4: not readable as YAML: a quoted text that is not closed"]),
        ("a:\n    b: 1\n  c: 1\n", ["weir.yaml:3:3: not readable as YAML: a line whose indent"]),
        ("a: @b\n", ["weir.yaml:1:4: not readable as YAML: a character that no value begins"]),
        (b"a: 1\nbc: \xff\n", ["weir.yaml:2:5: a byte 0xff that is not UTF-8"]),
        (b"\x89PNG\r\n\x1a\n\x00", ["weir.yaml:1:1: a byte 0x89"]),
        ("a: 1\n\x00\n", ["weir.yaml:2:1: a character U+0000"]),
        ("a: \ud800\n", ["weir.yaml:1:4: a character U+D800"]),
        ("a: [.nan, -.inf]\n", ["weir.yaml:1:5: .nan", "weir.yaml:1:11: -.inf"]),
    ],
)
def test_each_fault_of_form_is_told_with_its_place(text, told):
    found = faults(text)
    assert len(found) == len(told)
    for line, begin in zip(found, told, strict=True):
        assert line.startswith(begin)


def test_nesting_is_bounded_before_it_can_harm():
    assert tree("[" * MOST_DEPTH + "]" * MOST_DEPTH).kind == "list"
    (told,) = faults("[" * 100_000)
    assert told.startswith(f"weir.yaml:1:{MOST_DEPTH + 1}: nesting deeper than {MOST_DEPTH}")


def test_size_is_bounded_before_anything_is_read():
    (told,) = faults(b"#" * (MOST_BYTES + 1))
    assert told.startswith("weir.yaml:1:1: 1048577 bytes of text")
    (told,) = faults("[" * 10 * MOST_BYTES)
    assert told.startswith("weir.yaml:1:1: more than 2 MiB of text")


def test_endless_faults_are_counted_rather_than_told():
    told = faults("a\n\t" * 3000)
    assert len(told) == 1001
    assert told[-1] == "weir.yaml:1002:1: 2000 more from here on"


def test_other_line_ends_and_a_byte_order_mark_are_taken():
    spec = read(b"\xef\xbb\xbf" + SOUND.replace("\n", "\r\n").encode())
    assert spec.title == "Weir plate"
    assert refused(SOUND.replace("\n", "\r\n").replace("50 Hz", "50"))[0].startswith(
        "weir.yaml:6:32: centre: 50, a number without a unit"
    )


@settings(deadline=None, max_examples=300)
@given(st.one_of(st.text(), st.binary()))
def test_any_text_is_a_tree_or_told_of(content):
    findings = Findings()
    root = read_tree(content, "weir.yaml", findings)
    assert root is not None or findings
