"""A small sound spec of the gravel plate, and variants of it, for the tests of this folder."""

from __future__ import annotations

from pathlib import Path

import pytest

from pipeline_filters.errors import SpecError
from pipeline_filters.spec import Spec, parse_spec

EXAMPLES = Path(__file__).parents[2] / "example_specs"

SOUND = """\
spec_version: 1
title: Weir plate
signals:
  plate: {variable: velocity, sample_rate: 1 kHz}
filters:
  hum: {method: notch, centre: 50 Hz, width: 2 Hz}
results:
  clean: {from: plate, through: [hum], timing: causal, ends: hold}
"""


def read(text: str | bytes, folder: Path | None = None) -> Spec:
    return parse_spec(text, "weir.yaml", folder)


def with_(old: str, new: str) -> str:
    """The sound spec with one piece of text exchanged."""
    assert SOUND.count(old) == 1
    return SOUND.replace(old, new)


def refused(text: str | bytes, folder: Path | None = None) -> list[str]:
    """The messages with which a spec is refused."""
    with pytest.raises(SpecError) as caught:
        read(text, folder)
    return str(caught.value).splitlines()
