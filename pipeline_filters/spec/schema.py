"""The JSON Schema of the language: where it lies, what it names, what it finds wrong.

It is the one definition of the keys. Quantities are checked as formats, so that one pass
finds what is wrong with keys, types, words and units everywhere in a spec.
"""

from __future__ import annotations

import json
from collections.abc import Iterator
from functools import cache
from pathlib import Path
from typing import Any

from jsonschema import Draft202012Validator, FormatChecker
from jsonschema.exceptions import ValidationError

from pipeline_filters.spec.quantities import KINDS, UnreadableQuantityError

_NAME = "filter-spec.schema.json"


def schema_path() -> Path:
    """Where the schema lies: in an installed package, or beside it in a checkout."""
    package = Path(__file__).parents[1]
    installed = package / "schemas" / _NAME
    return installed if installed.exists() else package.parent / "schemas" / _NAME


@cache
def schema() -> dict[str, Any]:
    """The schema, as JSON has it. Not to be changed."""
    loaded: dict[str, Any] = json.loads(schema_path().read_text(encoding="utf-8"))
    return loaded


def method_names() -> tuple[str, ...]:
    """The methods that the language knows, in the schema's order."""
    return tuple(schema()["$defs"]["filter"]["properties"]["method"]["enum"])


def errors_in(plain: object) -> Iterator[ValidationError]:
    """What is wrong with a spec's plain values, in no order."""
    yield from _validator().iter_errors(plain)


@cache
def _validator() -> Draft202012Validator:
    checker = FormatChecker(formats=())
    for name, kind in KINDS.items():
        checker.checks(name, raises=UnreadableQuantityError)(_Check(kind.read))
    return Draft202012Validator(schema(), format_checker=checker)


class _Check:
    """A format's check: text must be readable; any other type is none of its business."""

    def __init__(self, read: Any) -> None:
        self.read = read

    def __call__(self, value: object) -> bool:
        if isinstance(value, str):
            self.read(value)
        return True
