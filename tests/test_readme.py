"""README's commands are run as they stand, and say what README says they say."""

from __future__ import annotations

import os
import re
import subprocess
import sys
from pathlib import Path

import pytest

from pipeline_filters.cli.entry import main
from pipeline_filters.demo.spec_text import SPEC_TEXT
from pipeline_filters.spec import read_spec
from pipeline_filters.spec.digests import result_digest

README = Path(__file__).parent.parent / "README.md"
TEXT = README.read_text(encoding="utf-8")


def blocks(language: str) -> list[str]:
    return re.findall(rf"^```{language}\n(.*?)^```", TEXT, flags=re.S | re.M)


def comparable(text: str) -> str:
    """Without what differs from run to run: seconds, memory as used, folders of the machine."""
    return re.sub(r"at most \d+ MiB each|\d+\.\d s$", "#", text, flags=re.M).strip()


@pytest.fixture(scope="module")
def folder(tmp_path_factory) -> Path:
    home = tmp_path_factory.mktemp("readme")
    assert main(["demo", str(home / "weir-demo"), "--workers", "1"]) == 0
    return home


def shell(command: str, folder: Path) -> str:
    scripts = Path(sys.executable).parent
    environment = {**os.environ, "PATH": f"{scripts}{os.pathsep}{os.environ['PATH']}"}
    done = subprocess.run(
        command,
        shell=True,
        cwd=folder,
        env=environment,
        stdout=subprocess.PIPE,
        stderr=subprocess.STDOUT,
        text=True,
        check=False,
    )
    return done.stdout


def test_every_command_says_what_readme_says(folder):
    told = 0
    for block in blocks("console"):
        said = "".join(
            f"$ {command}\n{shell(command, folder)}"
            for command in re.findall(r"^\$ (.*)$", block, flags=re.M)
        )
        assert comparable(said) == comparable(block)
        told += 1
    assert told >= 4


def test_the_spec_is_the_one_of_the_demo():
    (text,) = blocks("yaml")
    one, other = read_spec(text), read_spec(SPEC_TEXT)
    assert result_digest(one, "gravel_band") == result_digest(other, "gravel_band")


def test_the_python_example_runs(folder):
    (code,) = blocks("python")
    done = subprocess.run(
        [sys.executable, "-W", "error", "-c", code], cwd=folder, capture_output=True, text=True
    )
    assert done.returncode == 0, done.stderr


def test_the_test_command_is_the_one_that_the_gate_calls():
    command = "pip install -e '.[dev]' && python -m pytest"
    assert f"    {command}\n" in TEXT
    assert command in (README.parent / ".ci" / "run").read_text()


def test_every_file_that_readme_names_is_there():
    for name in re.findall(r"\]\(([\w./-]+)\)", TEXT):
        assert (README.parent / name).exists(), name
