"""The schema: complete, closed, at one with the registry, and found from any install."""

from __future__ import annotations

import os
import subprocess
import sys
import zipfile
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
from jsonschema import Draft202012Validator
from scipy.signal import windows
from weir_spec import SOUND

from pipeline_filters.design.butterworth import MOST_ORDER
from pipeline_filters.design.registry import METHODS
from pipeline_filters.product.places import RESERVED
from pipeline_filters.spec.meaning import COMMON_KEYS
from pipeline_filters.spec.quantities import KINDS
from pipeline_filters.spec.schema import method_names, schema, schema_path

ROOT = Path(__file__).parents[2]
SCHEMA = schema()
DEFS = SCHEMA["$defs"]


def rules(node: Any, path: str = "") -> Iterator[tuple[str, dict[str, Any]]]:
    """Every mapping in the schema, with the path to it."""
    if isinstance(node, dict):
        yield path, node
        for key, value in node.items():
            yield from rules(value, f"{path}/{key}")
    elif isinstance(node, list):
        for index, value in enumerate(node):
            yield from rules(value, f"{path}/{index}")


def test_it_is_a_sound_schema_of_its_draft():
    assert SCHEMA["$schema"] == "https://json-schema.org/draft/2020-12/schema"
    Draft202012Validator.check_schema(SCHEMA)


def test_methods_are_those_of_the_registry():
    assert set(method_names()) == set(METHODS)
    branches = DEFS["filter"]["allOf"]
    assert [b["if"]["properties"]["method"]["const"] for b in branches] == list(method_names())


@pytest.mark.parametrize("method", METHODS)
def test_a_methods_keys_are_those_of_the_registry(method):
    assert set(DEFS[method]["properties"]) - COMMON_KEYS == METHODS[method].keys
    is_recursion = METHODS[method].runs_as == "recursion"
    assert ("settle" in DEFS[method]["properties"]) == is_recursion
    assert "bands" in DEFS[method]["properties"]
    assert ("bands" in DEFS[method]["required"]) == (METHODS[method].bands == "drive")


def test_lists_that_are_kept_elsewhere_agree():
    assert set(DEFS["windowName"]["enum"]) == set(windows.__all__) - {"get_window"}
    assert DEFS["butterworth"]["properties"]["order"]["maximum"] == MOST_ORDER
    kept = SCHEMA["properties"]["results"]["propertyNames"]["not"]["enum"]
    assert set(kept) == set(RESERVED)
    formats = {rule["format"] for _, rule in rules(DEFS) if isinstance(rule.get("format"), str)}
    assert formats == set(KINDS) - {"bytes"}


def test_every_mapping_is_closed_and_there_is_no_one_of():
    for path, rule in rules(SCHEMA):
        assert "oneOf" not in rule, path
        is_condition = path.endswith("/if") or path == "/$defs/filter"
        if rule.get("type") == "object" and not is_condition:
            closed = rule.get("additionalProperties")
            assert closed is False or isinstance(closed, dict), path


def test_every_key_has_a_description():
    for path, rule in rules(SCHEMA):
        if "properties" not in rule or path.endswith(("/if", "/then", "/else")):
            continue
        for key, about in rule["properties"].items():
            assert about.get("description"), f"{path}: {key}"


def test_it_is_found_in_the_checkout():
    assert schema_path() == ROOT / "schemas" / "filter-spec.schema.json"


def test_it_is_found_in_a_wheel(tmp_path):
    build = [sys.executable, "-m", "hatchling", "build", "-t", "wheel", "-d", str(tmp_path)]
    subprocess.run(build, cwd=ROOT, check=True, capture_output=True)
    (wheel,) = tmp_path.glob("*.whl")
    installed = tmp_path / "installed"
    zipfile.ZipFile(wheel).extractall(installed)
    (tmp_path / "weir.yaml").write_text(SOUND)
    code = (
        "from pipeline_filters.spec import read_spec\n"
        "from pipeline_filters.spec.schema import schema_path\n"
        "print(schema_path()); print(read_spec('weir.yaml').title)"
    )
    run = subprocess.run(
        [sys.executable, "-c", code],
        cwd=tmp_path,
        env={**os.environ, "PYTHONPATH": str(installed)},
        check=True,
        capture_output=True,
        text=True,
    )
    place = installed / "pipeline_filters" / "schemas" / "filter-spec.schema.json"
    assert run.stdout.splitlines() == [str(place), "Weir plate"]
