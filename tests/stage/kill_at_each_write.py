"""Runs a spec again and again, each time killed at a later write of a file: a script of its own.

Forks before anything of Zarr runs, so that no thread is lost on the way.
"""

from __future__ import annotations

import os
import sys
from pathlib import Path

from pipeline_filters.stage.running import run


def killed_at(count: int, spec: str, source: str, product: str) -> bool:
    """A run in a process of its own that ends like a killed one at its ``count``-th renaming."""
    child = os.fork()
    if child == 0:
        code = 1
        try:
            left = count
            rename = os.replace

            def until(one, other):
                nonlocal left
                left -= 1
                if left < 0:
                    os._exit(9)
                rename(one, other)

            os.replace = until
            run(spec, source, product, span_samples=100)
            code = 0
        finally:
            os._exit(code)
    code = os.waitstatus_to_exitcode(os.waitpid(child, 0)[1])
    assert code in (0, 9), code
    return code == 9


def main(spec: str, source: str, products: str, step: int) -> None:
    """Kills at write 0, step, 2 step, ... until a run is through; prints how many there were."""
    count = 0
    while True:
        product = str(Path(products, str(count)))
        killed = killed_at(count, spec, source, product)
        # Every second product is killed a second time, where it goes on.
        if killed and count // step % 2:
            killed_at(step, spec, source, product)
        killed_at(1 << 30, spec, source, product)
        if not killed:
            break
        count += step
    print(count // step)


if __name__ == "__main__":
    main(*sys.argv[1:4], int(sys.argv[4]))
