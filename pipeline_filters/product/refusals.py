"""Refusals of a target: what the operating system says, and where a target may not lie."""

from __future__ import annotations

import errno
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from pipeline_filters.errors import Problem, ProductError, SourceError, SurroundingsError

_FOUND = {
    errno.ENOSPC: ("no space is left on the device", "free some space there, then run again"),
    errno.EDQUOT: ("the disk quota is used up", "free some space there, then run again"),
    errno.EACCES: ("access is denied", "have the right to write there given, then run again"),
    errno.EPERM: ("access is denied", "have the right to write there given, then run again"),
    errno.EROFS: ("the file system is read-only", "name a target on one that can be written"),
    errno.ENOTDIR: ("a part of the path is a file", "name a target whose parents are folders"),
    errno.ENAMETOOLONG: ("the path is too long", "name a shorter target"),
    errno.EMFILE: ("too many files are open", "raise the limit of open files, then run again"),
}


@contextmanager
def refused_by_the_system(path: str | Path, doing: str = "written") -> Iterator[None]:
    """Turns what the operating system refuses at ``path`` into a refusal.

    Args:
        path: of the product.
        doing: what is being done to the product, for the message.

    Raises:
        SurroundingsError: naming the path, what the system said and one remedy.
    """
    try:
        yield
    except OSError as error:
        if error.errno is None:
            raise
        found, remedy = _FOUND.get(
            error.errno, (error.strerror or str(error), "put this right, then run again")
        )
        raise SurroundingsError(
            Problem(str(path), f"the product cannot be {doing}: {found}", remedy=remedy)
        ) from error


def damaged(where: str | Path, what: str, error: Exception) -> ProductError:
    """The refusal of a product that a part cannot be read of."""
    lines = str(error).splitlines()
    detail = lines[0] if lines else type(error).__name__
    return ProductError(
        Problem(
            str(where),
            f"{what} cannot be read: {detail}",
            "a whole product",
            "take the product away by hand, or name another path, and run again",
        )
    )


def refuse_overlap(product: str | Path, source: str | Path | None) -> None:
    """Refuses a product that lies in its source, holds it, or is it.

    Raises:
        SourceError: naming both.
    """
    if source is None:
        return
    target, origin = Path(product).resolve(), _store_root(Path(source).resolve())
    if target == origin:
        found = "the product's path is the source's"
    elif target.is_relative_to(origin):
        found = f"the product lies inside the source {origin}"
    elif origin.is_relative_to(target):
        found = f"the source {origin} lies inside the product"
    else:
        return
    raise SourceError(
        Problem(
            str(product), found, "source and product are two separate stores", "name another path"
        )
    )


def _store_root(path: Path) -> Path:
    """The outermost folder of the Zarr store that ``path`` is, or is a group of."""
    marks = ("zarr.json", ".zgroup", ".zarray")
    root = path
    for parent in path.parents:
        if not any((parent / mark).exists() for mark in marks):
            break
        root = parent
    return root
