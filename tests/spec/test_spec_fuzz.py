"""A thousand damaged examples: each is a spec, or refused with places; never anything else."""

from __future__ import annotations

import copy
import random
from collections.abc import Callable
from typing import Any

import pytest
import yaml
from weir_spec import EXAMPLES

from pipeline_filters.errors import SpecError
from pipeline_filters.spec import Spec, parse_spec
from pipeline_filters.spec.digests import result_digest

TEXTS = [path.read_bytes() for path in sorted(EXAMPLES.glob("*.yaml"))]
PIECES = [
    b"\t", b"\x00", b"\xff", b": ", b"- ", b"{", b"}", b"[", b"]", b"&a ", b"*a", b"!!int ",
    b"<<: ", b"? ", b"| ", b"> ", b"'", b'"', b"#", b"---\n", b"%TAG ! x\n", b".nan", b"-.inf",
    b"1e999", b"9" * 50, b" Hz", b" dB", b"\n", b"\r", b"\xe2\x80\xa8", b"0x", b"null", b"~",
]  # fmt: skip
VALUES: list[Any] = [
    None, True, 0, -1, 1, 2.5, 1e300, -1e-300, 10**17, "", " ", "50", "50 Hz", "0 Hz", "-3 dB",
    "1e29 kHz", "1e-29 Hz", "5 samples", "1e30 samples", "3 ns", "auto", "hann", "plate",
    "geophone", "low-pass", "band-pass", "kaiser", "taps", "butterworth", "register", "time",
    [], {}, [[]], [None], [1, 1], ["50 Hz", "20 Hz"], {"bridge": "1 ns"}, {"": ""},
    {"to": "5 Hz"}, "x" * 500,
]  # fmt: skip


def damage_bytes(text: bytes, dice: random.Random) -> bytes:
    """Cuts, repeats, overwrites or inserts at a few random places."""
    for _ in range(dice.choice([1, 1, 2, 5])):
        at, until = sorted(dice.randrange(len(text) + 1) for _ in range(2))
        until = min(until, at + dice.choice([1, 5, 200]))
        text = dice.choice(
            [
                text[:at] + text[until:],
                text[:at] + dice.choice(PIECES) + text[at:],
                text[:at] + dice.choice(PIECES) + text[until:],
                text[:until] + text[at:],
                text[:at] + bytes([dice.randrange(256)]) + text[at + 1 :],
                text[:at] or text,
            ]
        )
    return text


def spots(tree: Any) -> list[tuple[Any, Any]]:
    """Every place in a tree: the holder, and the key or index in it."""
    found: list[tuple[Any, Any]] = []
    steps = tree.items() if isinstance(tree, dict) else enumerate(tree)
    for key, value in steps:
        found.append((tree, key))
        if isinstance(value, dict | list):
            found += spots(value)
    return found


def damage_structure(text: bytes, dice: random.Random) -> bytes:
    """Removes, exchanges, renames or nests parts of the tree."""
    tree = yaml.safe_load(text)
    for _ in range(dice.choice([1, 1, 1, 2, 4])):
        if not (places := spots(tree)):
            break
        holder, key = dice.choice(places)
        match dice.randrange(5):
            case 0:
                del holder[key]
            case 1:
                holder[key] = copy.deepcopy(dice.choice(VALUES))
            case 2:
                other, there = dice.choice(places)
                if there in other if isinstance(other, dict) else there < len(other):
                    holder[key] = copy.deepcopy(other[there])
            case 3 if isinstance(holder, dict):
                holder[dice.choice([f"{key}s", "", 5, "bands", "settle", "order"])] = holder.pop(
                    key
                )
            case _:
                holder[key] = [holder[key]] if dice.random() < 0.5 else {"a": holder[key]}
    return yaml.safe_dump(tree, sort_keys=False).encode()


def outcome(content: bytes) -> str:
    """Reads damaged text; anything but a spec or a refusal ends the test."""
    try:
        spec = parse_spec(content, "weir.yaml", EXAMPLES)
    except SpecError as error:
        check_refusal(error, content)
        return "refused"
    assert isinstance(spec, Spec)
    assert all(len(result_digest(spec, name)) == 64 for name in spec.results)
    return "spec"


def check_refusal(error: SpecError, content: bytes) -> None:
    assert error.problems
    places = [problem.where.split(":") for problem in error.problems]
    assert all(file == "weir.yaml" for file, _, _ in places)
    order = [(int(line), int(column)) for _, line, column in places]
    assert order == sorted(order)
    last = content.count(b"\n") + content.count(b"\r") + 1
    assert all(1 <= line <= last and column >= 1 for line, column in order)
    assert all(len(str(problem)) < 1000 for problem in error.problems)


@pytest.mark.parametrize("damage", [damage_bytes, damage_structure])
def test_damaged_specs_are_specs_or_refused(damage: Callable[[bytes, random.Random], bytes]):
    dice = random.Random(20)
    outcomes = [outcome(damage(dice.choice(TEXTS), dice)) for _ in range(500)]
    # Damage that never leaves a sound spec, or never harms one, would test one half only.
    assert min(outcomes.count("spec"), outcomes.count("refused")) > 20
