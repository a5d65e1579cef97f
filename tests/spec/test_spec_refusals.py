"""What people read when a spec is refused, held word for word in refusals.txt.

Each case there is a spec and the messages it gets. After a wanted change of wording run
``python tests/spec/test_spec_refusals.py`` to write the messages anew, and read the difference.
"""

from __future__ import annotations

import re
from pathlib import Path

import pytest

from pipeline_filters.errors import SpecError
from pipeline_filters.spec import parse_spec
from pipeline_filters.spec.model import Spec

BOOK = Path(__file__).with_name("refusals.txt")
CASE = re.compile(r"^#### (.+)\n((?:.*\n)*?)==== says\n((?:(?!#### ).*\n)*)", re.MULTILINE)


def cases() -> list[tuple[str, str, str]]:
    """Name, spec and messages of each case."""
    return [(name, spec, says.strip("\n")) for name, spec, says in CASE.findall(BOOK.read_text())]


def said(spec: str) -> str:
    try:
        read: Spec = parse_spec(spec, "weir.yaml", BOOK.parent)
    except SpecError as error:
        return str(error)
    return f"taken: {read.title}"


@pytest.mark.parametrize(("name", "spec", "says"), cases(), ids=[case[0] for case in cases()])
def test_refusals_say_what_they_said(name, spec, says):
    assert said(spec) == says


def test_the_book_is_read_whole():
    text = BOOK.read_text()
    assert len(cases()) == text.count("\n#### ") == text.count("\n==== says\n") > 20
    # An example of the book that is taken would be no refusal.
    assert not [name for name, _, says in cases() if says.startswith("taken: ")]


def main() -> None:
    """Writes the messages anew."""
    head = BOOK.read_text().split("\n#### ")[0]
    told = "".join(f"\n#### {name}\n{spec}==== says\n{said(spec)}\n" for name, spec, _ in cases())
    BOOK.write_text(head + told)


if __name__ == "__main__":
    main()
