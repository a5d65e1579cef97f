"""The README's example runs and prints what it says."""

from __future__ import annotations

import re
import subprocess
import sys
from pathlib import Path

README = Path(__file__).parent.parent / "README.md"


def test_the_example_prints_true():
    section = README.read_text().split("## An example")[1].split("It prints")[0]
    code = "\n".join(re.findall(r"^ {4}(.*)$|^$", section, re.M))
    run = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert run.stdout == "True\n"
