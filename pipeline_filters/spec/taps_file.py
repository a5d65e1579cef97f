"""Taps kept in a file beside the spec: read once, held to their digest, checked."""

from __future__ import annotations

import hashlib
import warnings
from io import BytesIO
from pathlib import Path, PurePosixPath

import numpy as np

from pipeline_filters.spec.findings import shortened

# 2^20 taps of 16 bytes each, and room for the header; as text a tap takes more.
MOST_FILE_BYTES = 1 << 25


class UnusableTapsError(ValueError):
    """A file that holds no taps; in parts as a problem has them. ``key`` is the spec's key."""

    def __init__(self, key: str, found: str, allowed: str = "", remedy: str = "") -> None:
        super().__init__(key, found, allowed, remedy)
        self.key = key
        self.found = found
        self.allowed = allowed
        self.remedy = remedy


def load_taps(name: str, sha256: str, folder: Path | None) -> tuple[float, ...]:
    """The taps in a file.

    Args:
        name: the file's name, from ``folder``; ``.npy`` (one dimension of real numbers) or
            ``.csv`` (numbers parted by commas or line ends, ``#`` begins a remark).
        sha256: the digest of the file's bytes, in lower-case hexadecimal.
        folder: where the spec lies; None where it is no file.

    Raises:
        UnusableTapsError: no such file, another digest, or no taps in it.
    """
    if folder is None:
        raise UnusableTapsError(
            "file", f"{name}, but the spec is no file", "taps in a file beside the spec",
            "write the spec to a file, or write out the taps",
        )  # fmt: skip
    path = PurePosixPath(name)
    if path.is_absolute() or ".." in path.parts or "\\" in name:
        raise UnusableTapsError(
            "file", name, "a file beside the spec or in a folder below it", "move the file there"
        )
    content = _content(folder / name, name)
    digest = hashlib.sha256(content).hexdigest()
    if digest != sha256:
        raise UnusableTapsError(
            "sha256",
            f"the file {name} has the digest {digest}",
            "the digest that the spec states",
            "see what changed in the file; where the change is meant, state its digest",
        )
    taps = _from_csv(content, name) if path.suffix == ".csv" else _from_npy(content, name)
    if taps.size == 0:
        raise UnusableTapsError("file", f"{name} holds no taps", "at least one tap")
    if not np.isfinite(taps).all():
        at = int(np.flatnonzero(~np.isfinite(taps))[0])
        raise UnusableTapsError("file", f"tap {at} of {name} is {taps[at]}", "finite taps")
    if not taps.any():
        raise UnusableTapsError("file", f"the taps in {name} are all 0", "at least one that is not")
    return tuple(taps.tolist())


def _content(path: Path, name: str) -> bytes:
    try:
        with path.open("rb") as file:
            content = file.read(MOST_FILE_BYTES + 1)
    except (OSError, ValueError) as error:  # ValueError: a NUL in the name
        reason = getattr(error, "strerror", None) or str(error)
        raise UnusableTapsError(
            "file", f"{name} cannot be read: {reason}", "a file beside the spec", "check its name"
        ) from None
    if len(content) > MOST_FILE_BYTES:
        raise UnusableTapsError(
            "file", f"{name} is larger than {MOST_FILE_BYTES} bytes", "up to 2^20 taps"
        )
    return content


def _from_csv(content: bytes, name: str) -> np.ndarray:
    try:
        lines = content.decode().splitlines()
    except UnicodeDecodeError:
        raise UnusableTapsError("file", f"{name} is not UTF-8 text", "numbers as text") from None
    taps = []
    for number, line in enumerate(lines, 1):
        words = [word.strip() for word in line.split("#")[0].split(",")]
        for word in words if any(words) else []:
            try:
                taps.append(float(word))
            except ValueError:
                raise UnusableTapsError(
                    "file",
                    f"line {number} of {name} holds {word[:40] or 'nothing between two commas'}",
                    "numbers parted by commas or line ends, no headings",
                ) from None
    return np.array(taps, np.float64)


def _from_npy(content: bytes, name: str) -> np.ndarray:
    allowed = "a .npy file of one dimension of real numbers"
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            taps = np.lib.format.read_array(BytesIO(content), allow_pickle=False)
    except Exception as error:  # whatever a damaged header makes numpy raise
        raise UnusableTapsError(
            "file",
            f"{name} cannot be read: {shortened(str(error), 100) or 'damaged'}",
            allowed,
        ) from None
    if taps.ndim != 1 or taps.dtype.kind not in "iuf":
        raise UnusableTapsError("file", f"{name} holds {taps.dtype} of shape {taps.shape}", allowed)
    return taps.astype(np.float64)
