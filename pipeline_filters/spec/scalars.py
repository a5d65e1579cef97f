"""Plain scalars by the core types of YAML 1.2 (section 10.3 of its specification).

So ``1e3`` is a number and ``off``, ``yes`` and ``12:30`` are text.
"""

from __future__ import annotations

import re
from math import isinf

from pipeline_filters.spec.tree import ScalarValue

_WHOLE = re.compile(r"[-+]?[0-9]+")
_OCTAL = re.compile(r"0o[0-7]+")
_HEXADECIMAL = re.compile(r"0x[0-9a-fA-F]+")
_DECIMAL = re.compile(r"[-+]?(?:\.[0-9]+|[0-9]+(?:\.[0-9]*)?)(?:[eE][-+]?[0-9]+)?")
_NO_NUMBER = re.compile(r"[-+]?\.(?:inf|Inf|INF)|\.(?:nan|NaN|NAN)")
_WORDS: dict[str, bool | None] = {
    **dict.fromkeys(("", "~", "null", "Null", "NULL"), None),
    **dict.fromkeys(("true", "True", "TRUE"), True),
    **dict.fromkeys(("false", "False", "FALSE"), False),
}
# No count or label needs more digits; beyond it integers and floats part ways.
_MOST_DIGITS = 18


class UnusableNumberError(ValueError):
    """A scalar that is a number by its type, but none to reckon with."""


def core_value(text: str) -> ScalarValue:
    """The value of a plain (unquoted) scalar.

    Raises:
        UnusableNumberError: not-a-number, infinity, or a number too large to hold.
    """
    if text in _WORDS:
        return _WORDS[text]
    if _NO_NUMBER.fullmatch(text):
        raise UnusableNumberError(f"{text}, which is no finite number")
    for pattern, base in ((_WHOLE, 10), (_OCTAL, 8), (_HEXADECIMAL, 16)):
        if pattern.fullmatch(text):
            digits = text if base == 10 else text[2:]
            if len(digits) > _MOST_DIGITS:
                raise UnusableNumberError(f"a whole number of {len(digits)} digits")
            return int(digits, base)
    if _DECIMAL.fullmatch(text):
        number = float(text)
        if isinf(number):
            raise UnusableNumberError(f"{text[:40]}, which is too large")
        return number
    return text


def is_other_than_text(text: str) -> bool:
    """Whether a scalar that is text by its quotes would be something else without them."""
    try:
        return not isinstance(core_value(text), str)
    except UnusableNumberError:
        return True
