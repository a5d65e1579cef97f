"""Strict YAML: text in, a tree with places out, and every fault of form with its place.

A small part of YAML is enough for a spec and leaves nothing to be misread: one document of
mappings, lists and scalars. Anchors, aliases, tags, directives, tabs, repeated keys and keys
that are not text are refused.
"""

from __future__ import annotations

import re
from bisect import bisect_right
from collections.abc import Iterator

import yaml

from pipeline_filters.spec.findings import Findings, shortened
from pipeline_filters.spec.model import Place
from pipeline_filters.spec.scalars import UnusableNumberError, core_value
from pipeline_filters.spec.tree import Node

MOST_BYTES = 1 << 20
MOST_DEPTH = 32

# Characters that cannot be seen or would count as line ends in YAML 1.1 alone.
_UNSEEN = re.compile(
    "[^\t\n\r -~\xa0-\u2027\u202a-\ud7ff\ue000-\ufefe\uff00-\ufffd\U00010000-\U0010ffff]"
)

# Words of the parser's complaints, and what they mean for a spec.
_COMPLAINTS = (
    ("expected <block end>", "a line whose indentation fits nothing above it"),
    ("mapping values are not allowed", "a second ': ' where one value is expected"),
    ("could not find expected ':'", "a line that is no 'key: value'"),
    ("expected ',' or ']'", "a list [...] that is not closed"),
    ("expected ',' or '}'", "a mapping {...} that is not closed"),
    ("unexpected end of stream", "a quoted text that is not closed"),
    ("expected the node content", "a sign where a value is expected"),
    ("cannot start any token", "a character that no value begins with unless it is quoted"),
    ("block sequence entries are not allowed", "a '- ' where no list can begin"),
    ("expected <document start>", "more text after the end of the document"),
    ("escape", "an escape in a quoted text that YAML does not know"),
)


class _TooDeepError(Exception):
    """The text nests deeper than any spec does; reading ends."""


def read_tree(content: str | bytes, file: str, findings: Findings) -> Node | None:
    """Reads YAML text strictly.

    Args:
        content: text, or its UTF-8 bytes.
        file: the name that places carry.
        findings: takes every fault of form.

    Returns:
        The tree; None where there is none to go on with, which ``findings`` then tells.
    """
    text = _decoded(content, file, findings)
    if text is None:
        return None
    if not _is_clean(text, file, findings):
        return None
    try:
        return _Assembly(file, findings).document(text)
    except _TooDeepError:
        return None
    except yaml.MarkedYAMLError as error:
        complaint = f"{error.context or ''} {error.problem or ''}".strip()
        meaning = next((ours for theirs, ours in _COMPLAINTS if theirs in complaint), None)
        # What is not closed is mended where it opens.
        opens = meaning is not None and meaning.endswith("not closed")
        mark = (error.context_mark if opens else None) or error.problem_mark or error.context_mark
        place = Place(file, mark.line + 1, mark.column + 1) if mark else Place(file, 1, 1)
        findings.add(
            place,
            f"not readable as YAML: {meaning or shortened(complaint, 120)}",
            "mappings 'key: value', lists '- item', and scalars",
            "close it" if opens else "mend this place or the line above it",
        )
    except yaml.YAMLError as error:
        findings.add(Place(file, 1, 1), f"not readable as YAML: {shortened(str(error), 120)}")
    return None


def _decoded(content: str | bytes, file: str, findings: Findings) -> str | None:
    size = len(content) if isinstance(content, bytes) else len(content.encode(errors="replace"))
    if size > MOST_BYTES:
        findings.add(
            Place(file, 1, 1),
            f"{size} bytes of text" if size < 2 * MOST_BYTES else "more than 2 MiB of text",
            f"at most {MOST_BYTES} bytes",
            "keep long taps in a file beside the spec",
        )
        return None
    if isinstance(content, str):
        return content.removeprefix("\ufeff")
    try:
        return content.decode().removeprefix("\ufeff")
    except UnicodeDecodeError as error:
        before = content[: error.start]
        line_start = before.rfind(b"\n") + 1
        place = Place(file, before.count(b"\n") + 1, len(before[line_start:].decode()) + 1)
        findings.add(
            place,
            f"a byte {content[error.start]:#04x} that is not UTF-8 text",
            "a spec in UTF-8",
            "name the spec itself, or save it as UTF-8",
        )
        return None


def _is_clean(text: str, file: str, findings: Findings) -> bool:
    """Whether the text is free of tabs and of characters that cannot be seen."""
    starts = [0, *(match.end() for match in re.finditer("\r\n|\r|\n", text))]

    def place_of(position: int) -> Place:
        line = bisect_right(starts, position)
        return Place(file, line, position - starts[line - 1] + 1)

    clean = True
    for match in re.finditer("\t+", text):
        clean = False
        findings.add(place_of(match.start()), "a tab", "spaces", "put spaces in its place")
    for match in _UNSEEN.finditer(text):
        findings.add(
            place_of(match.start()),
            f"a character U+{ord(match.group()):04X} that cannot be seen",
            "readable text",
            "take it away; is this a spec?",
        )
        return False
    return clean


class _Assembly:
    """Makes the tree from the parser's events."""

    def __init__(self, file: str, findings: Findings) -> None:
        self.file = file
        self.findings = findings

    def document(self, text: str) -> Node | None:
        events = iter(yaml.parse(text, Loader=yaml.SafeLoader))
        root: Node | None = None
        documents = 0
        for event in events:
            if isinstance(event, yaml.DocumentStartEvent):
                documents += 1
                if documents > 1:
                    self._refuse(event, "a second document", "one document a file", "split it")
                    return None
                if event.tags or event.version not in (None, (1, 2)):
                    self._refuse(event, "a % directive", "none, or %YAML 1.2", "remove it")
            elif isinstance(event, yaml.NodeEvent):
                root = self._node(event, events, 1, None)
        if root is None or (root.kind == "scalar" and root.value is None):
            self.findings.add(
                Place(self.file, 1, 1),
                "nothing in it",
                "a spec",
                "start from one of the files in example_specs",
            )
            return None
        return root

    def _place(self, event: yaml.Event) -> Place:
        mark = event.start_mark
        assert mark is not None
        return Place(self.file, mark.line + 1, mark.column + 1)

    def _refuse(self, event: yaml.Event, found: str, allowed: str, remedy: str) -> None:
        self.findings.add(self._place(event), found, allowed, remedy)

    def _node(
        self, event: yaml.Event, events: Iterator[yaml.Event], depth: int, key: Place | None
    ) -> Node:
        place = self._place(event)
        if key is not None and key.line != place.line:
            place = key
        if isinstance(event, yaml.NodeEvent):
            self._refuse_marks(event)
        if isinstance(event, yaml.MappingStartEvent | yaml.SequenceStartEvent):
            if depth > MOST_DEPTH:
                self._refuse(
                    event, f"nesting deeper than {MOST_DEPTH}", "a spec nests 6 deep", "is it one?"
                )
                raise _TooDeepError
            if isinstance(event, yaml.MappingStartEvent):
                return self._mapping(place, events, depth)
            node = Node("list", place)
            while not isinstance(event := next(events), yaml.SequenceEndEvent):
                node.items.append(self._node(event, events, depth + 1, None))
            return node
        if isinstance(event, yaml.ScalarEvent):
            return self._scalar(event, place)
        return Node("scalar", place, refused=True)  # an alias

    def _mapping(self, place: Place, events: Iterator[yaml.Event], depth: int) -> Node:
        node = Node("mapping", place)
        while not isinstance(event := next(events), yaml.MappingEndEvent):
            at = self._place(event)
            key = self._node(event, events, depth + 1, None)
            entry = self._node(next(events), events, depth + 1, at)
            if not isinstance(key.value, str):
                written = shortened(key.text) if key.kind == "scalar" else f"a {key.kind}"
                self.findings.add(
                    at,
                    f"{written or 'nothing'} as a key",
                    "text as keys",
                    f'write "{written}":' if written and key.kind == "scalar" else "name it",
                )
            elif key.value in node.entries:
                self.findings.add(
                    at,
                    f"{shortened(key.value)} once more",
                    f"each key once; it stands in line {node.keys[key.value].line} as well",
                    "remove one of the two",
                )
            else:
                node.entries[key.value] = entry
                node.keys[key.value] = at
        return node

    def _refuse_marks(self, event: yaml.NodeEvent) -> None:
        if isinstance(event, yaml.AliasEvent):
            self._refuse(
                event, f"an alias *{event.anchor}", "values written out", "write the value here"
            )
        elif event.anchor is not None:
            self._refuse(event, f"an anchor &{event.anchor}", "values without anchors", "remove it")
        tag = getattr(event, "tag", None)
        if tag is not None:
            self._refuse(
                event, f"a tag {shortened(str(tag))}", "values without tags", "remove the tag"
            )

    def _scalar(self, event: yaml.ScalarEvent, place: Place) -> Node:
        if event.style is not None:
            return Node("scalar", place, str(event.value), event.value)
        try:
            return Node("scalar", place, core_value(event.value), event.value)
        except UnusableNumberError as error:
            self._refuse(event, str(error), "a finite number", "state the number that is meant")
            return Node("scalar", place, 1.0, event.value, refused=True)
