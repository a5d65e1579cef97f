"""Where things lie in a product, and the marks that tell ours from other stores.

::

    product/                    group; attribute pipeline_filters: format, spec, source, results
        <result>/               group; opens with xarray on its own
            <result>            the array
            <time>, <channels>  its coordinates
        coefficients/<result>/  group of the arrays that the result's filters are made of
        register/<result>/      group of arrays over the storage units of the result
        register/.lock/held     the lock file: in an array's folder nobody lists files
"""

from __future__ import annotations

import re
from pathlib import Path

MARK = "pipeline_filters"
FORMAT = 1
REGISTER = "register"
COEFFICIENTS = "coefficients"
RESERVED = (REGISTER, COEFFICIENTS)
LOCK = ".lock"

# What a writer that was killed leaves behind: the part of a file that had not got its name.
PARTIAL = re.compile(r"\.[0-9a-f]{32}\.partial$")


def lock_file(path: Path) -> Path:
    """The file that a run holds."""
    return path / REGISTER / LOCK / "held"


def result_folders(path: Path, result: str) -> tuple[Path, ...]:
    """All folders of one result."""
    return path / result, path / COEFFICIENTS / result, path / REGISTER / result
