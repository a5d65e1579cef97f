"""A spec's text as a tree of plain values, each with its place."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from typing import Literal, TypeVar

from pipeline_filters.spec.model import Place
from pipeline_filters.spec.quantities import UnreadableQuantityError

_Read = TypeVar("_Read")
ScalarValue = str | int | float | bool | None


@dataclass(frozen=True, eq=False)
class Node:
    """One value of the tree.

    Attributes:
        kind: scalar, mapping or list.
        place: where people should look: the value itself, or its key where the value only
            begins on a later line.
        value, text: of a scalar; its value by YAML 1.2's core types, and as it is written.
        entries, keys: of a mapping; the values, and where their keys stand.
        items: of a list.
        refused: its form has been refused already, and its value stands in for what is meant.
    """

    kind: Literal["scalar", "mapping", "list"]
    place: Place
    value: ScalarValue = None
    text: str = ""
    entries: dict[str, Node] = field(default_factory=dict)
    keys: dict[str, Place] = field(default_factory=dict)
    items: list[Node] = field(default_factory=list)
    refused: bool = False

    def plain(self) -> object:
        """The value without places, as JSON would have it."""
        if self.kind == "mapping":
            return {key: entry.plain() for key, entry in self.entries.items()}
        if self.kind == "list":
            return [item.plain() for item in self.items]
        return self.value

    def at(self, path: Sequence[str | int]) -> Node:
        """The value that a path of keys and indices leads to."""
        node = self
        for step in path:
            node = node.items[step] if isinstance(step, int) else node.entries[step]
        return node

    def get(self, key: str) -> Node | None:
        """An entry of a mapping; None where there is none, or where this is no mapping."""
        return self.entries.get(key)

    def word(self, key: str) -> str | None:
        """A text entry; None where it is absent or not text."""
        node = self.entries.get(key)
        return node.value if node is not None and isinstance(node.value, str) else None

    def number(self, key: str) -> float | None:
        """A number entry; None where it is absent, not usable or no number."""
        node = self.entries.get(key)
        if node is None or node.refused or isinstance(node.value, bool):
            return None
        return float(node.value) if isinstance(node.value, int | float) else None

    def quantity(self, read: Callable[[str], _Read]) -> _Read | None:
        """This value as a quantity; None where it is none, of which the schema has told."""
        if not isinstance(self.value, str):
            return None
        try:
            return read(self.value)
        except UnreadableQuantityError:
            return None
