"""What the schema finds wrong, in words of our own, each at its place in the text."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from typing import Any

from jsonschema.exceptions import ValidationError

from pipeline_filters.spec.findings import Findings, did_you_mean, listed, shortened
from pipeline_filters.spec.model import Place
from pipeline_filters.spec.quantities import KINDS, UnreadableQuantityError, bare_number
from pipeline_filters.spec.scalars import is_other_than_text
from pipeline_filters.spec.tree import Node

_TYPES = {
    "object": "a mapping 'key: value'",
    "array": "a list",
    "string": "text",
    "number": "a number",
    "integer": "a whole number",
    "boolean": "true or false",
    "null": "null",
}


def tell_all(errors: Iterable[ValidationError], root: Node, findings: Findings) -> None:
    """Adds what the schema's errors mean to ``findings``."""
    held = list(errors)
    for error in held:
        _tell(error, root, findings)
    if not findings:
        # An error that its wording has no words for must not pass as none.
        for error in held:
            _other(error, root.at(list(error.absolute_path)), list(error.absolute_path), findings)


def _tell(error: ValidationError, root: Node, findings: Findings) -> None:
    path = list(error.absolute_path)
    if root.at(path).refused:
        return
    if "propertyNames" in error.absolute_schema_path:
        _name(error, root.at(path), path, findings)
    elif error.validator == "required":
        _required(error, root, path, findings)
    else:
        _WORDINGS.get(str(error.validator), _other)(error, root.at(path), path, findings)


def _wanted(error: ValidationError) -> Any:
    """The value of the rule that failed: a type's name, a list of words, a number."""
    return error.validator_value


def describe(node: Node) -> str:
    """A value as it is written, or what it is where it is more than a word."""
    if node.kind == "mapping":
        return "a mapping" if node.entries else "an empty mapping"
    if node.kind == "list":
        return "a list" if node.items else "an empty list"
    if node.value is None:
        return "nothing"
    if isinstance(node.value, str) and is_other_than_text(node.text):
        return f'"{shortened(node.text)}"' if node.text else "an empty text"
    return shortened(node.text) or "an empty text"


def _key(path: Sequence[str | int]) -> str:
    """The key that a path ends in, for the head of a message; ``bands[2]`` for an item."""
    if not path:
        return ""
    last = path[-1]
    if isinstance(last, str):
        return f"{shortened(last)}: "
    return f"{path[-2] if len(path) > 1 else ''}[{last + 1}]: "


def _hint(error: ValidationError) -> str:
    """What the rule that failed says of itself."""
    rule = error.schema
    return _as_clause(rule.get("description", "")) if isinstance(rule, dict) else ""


def _as_clause(description: object) -> str:
    """A description of the schema as a part of a sentence."""
    text = str(description).rstrip(".")
    return text[:1].lower() + text[1:] if text[1:2].islower() or text[1:2] == " " else text


def _holder(node: Node, path: Sequence[str | int], root: Node) -> Place:
    """Where people find a mapping that lacks something: the key that holds it."""
    if path and isinstance(path[-1], str):
        return root.at(path[:-1]).keys[path[-1]]
    return node.place


def _type(error: ValidationError, node: Node, path: list[str | int], findings: Findings) -> None:
    rule = error.schema
    kind = rule.get("format") if isinstance(rule, dict) else None
    is_number = isinstance(node.value, int | float) and not isinstance(node.value, bool)
    if kind in KINDS and is_number:
        _quantity(bare_number(kind, node.text), node, path, findings)
        return
    if kind in KINDS:
        allowed = KINDS[kind].allowed
    else:
        types = [_wanted(error)] if isinstance(_wanted(error), str) else None
        allowed = listed(_TYPES[name] for name in types or _wanted(error))
    remedy = "state it, or remove the key" if node.kind == "scalar" and node.value is None else ""
    if not remedy and is_number and _wanted(error) == "integer":
        remedy = "round it"
    if not remedy and _wanted(error) in ("number", "integer") and node.kind == "scalar":
        remedy = "write the number without quotes or unit"
    if not remedy and _wanted(error) == "string" and node.kind == "scalar":
        remedy = f'write "{shortened(node.text)}" if that is meant'
    if not remedy and _wanted(error) == "array":
        remedy = f"write [{describe(node)}]" if node.kind == "scalar" else "write a list [...]"
    findings.add(node.place, f"{_key(path)}{describe(node)}", allowed, remedy or _hint(error))


def _format(error: ValidationError, node: Node, path: list[str | int], findings: Findings) -> None:
    assert isinstance(error.cause, UnreadableQuantityError)
    _quantity(error.cause, node, path, findings)


def _quantity(
    error: UnreadableQuantityError, node: Node, path: list[str | int], findings: Findings
) -> None:
    findings.add(node.place, f"{_key(path)}{error.found}", error.allowed, error.remedy)


def _enum(error: ValidationError, node: Node, path: list[str | int], findings: Findings) -> None:
    written = node.text if node.kind == "scalar" else ""
    if error.validator == "const":
        only = str(_wanted(error))
        remedy = f"write {only}" + (" without quotes" if written == only else "")
        findings.add(node.place, f"{_key(path)}{describe(node)}", only, remedy)
        return
    words = [str(word) for word in _wanted(error)]
    findings.add(
        node.place,
        f"{_key(path)}{describe(node)}",
        listed(words),
        did_you_mean(written, words, _hint(error)),
    )


def _required(
    error: ValidationError, root: Node, path: list[str | int], findings: Findings
) -> None:
    node = root.at(path)
    rule = error.schema if isinstance(error.schema, dict) else {}
    place = _holder(node, path, root)
    # A rule of a choice says itself what the choices are; its type is stated elsewhere.
    choice = "type" not in rule and "description" in rule
    for key in _wanted(error):
        if key in node.entries:
            continue
        found = f"{_key(path)}{key} is missing" if path else f"{key} is missing"
        about = rule.get("properties", {}).get(key, {})
        allowed = _hint(error) if choice else _as_clause(about.get("description", ""))
        findings.add(place, found, allowed, f"add {key}")


def _additional(
    error: ValidationError, node: Node, path: list[str | int], findings: Findings
) -> None:
    rule = error.schema if isinstance(error.schema, dict) else {}
    known = list(rule.get("properties", {}))
    for key, place in node.keys.items():
        if key not in known:
            free = [word for word in known if word not in node.entries]
            findings.add(
                place,
                f"{_key(path)}unknown key {shortened(key)}",
                listed(sorted(known)),
                did_you_mean(key, free, "remove it"),
            )


def _count(error: ValidationError, node: Node, path: list[str | int], findings: Findings) -> None:
    few = error.validator in ("minItems", "minProperties", "minLength")
    entries = "entry" if _wanted(error) == 1 else "entries"
    limit = f"at {'least' if few else 'most'} {_wanted(error)} {entries}"
    count = len(node.items) if node.kind == "list" else len(node.entries)
    if node.kind == "scalar":
        findings.add(node.place, f"{_key(path)}an empty text", _hint(error), "state it")
        return
    item = {0: "nothing", 1: "1 entry"}.get(count, f"{count} entries")
    rule = error.schema if isinstance(error.schema, dict) else {}
    # The inner rules of a choice have no type of their own and say what they ask for.
    allowed = limit if "type" in rule else _hint(error) or limit
    findings.add(
        node.place, f"{_key(path)}{item}", allowed, "add what is lacking" if few else "remove some"
    )


def _limit(error: ValidationError, node: Node, path: list[str | int], findings: Findings) -> None:
    bound = {
        "minimum": "at least",
        "exclusiveMinimum": "above",
        "maximum": "at most",
    }[str(error.validator)]
    findings.add(
        node.place,
        f"{_key(path)}{describe(node)}",
        f"{bound} {_wanted(error):g}",
        _hint(error),
    )


def _not(error: ValidationError, node: Node, path: list[str | int], findings: Findings) -> None:
    findings.add(node.place, f"{_key(path)[:-2]} beside its alternative", _hint(error), "remove it")


def _pattern(error: ValidationError, node: Node, path: list[str | int], findings: Findings) -> None:
    findings.add(node.place, f"{_key(path)}{describe(node)}", _hint(error))


def _unique(error: ValidationError, node: Node, path: list[str | int], findings: Findings) -> None:
    del error  # the rule has nothing to add
    seen: set[object] = set()
    for index, item in enumerate(node.items):
        if item.value not in seen:
            seen.add(item.value)
        else:
            findings.add(
                item.place,
                f"{_key([*path, index])}{describe(item)} once more",
                "each label once",
                "remove it",
            )


def _name(error: ValidationError, node: Node, path: list[str | int], findings: Findings) -> None:
    """A name of the user's own making that cannot serve as one."""
    name = str(error.instance)
    if error.validator == "not":
        allowed, remedy = "any other name: the product keeps this one for itself", "rename it"
    else:
        allowed, remedy = _hint(error), "rename it"
    findings.add(
        node.keys[name], f"{_key(path)}the name {shortened(name) or '(empty)'}", allowed, remedy
    )


def _other(error: ValidationError, node: Node, path: list[str | int], findings: Findings) -> None:
    """For a rule that the schema does not use yet: what the rule says of itself."""
    findings.add(node.place, f"{_key(path)}{describe(node)}", _hint(error))


_Wording = Callable[[ValidationError, Node, list[str | int], Findings], None]
_WORDINGS: dict[str, _Wording] = {
    "type": _type,
    "format": _format,
    "enum": _enum,
    "const": _enum,
    "additionalProperties": _additional,
    **dict.fromkeys(("minItems", "maxItems", "minProperties", "minLength"), _count),
    **dict.fromkeys(("minimum", "exclusiveMinimum", "maximum"), _limit),
    "not": _not,
    "pattern": _pattern,
    "uniqueItems": _unique,
}
