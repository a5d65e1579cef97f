"""What lies where in a demo's folder, and whose a folder is."""

from __future__ import annotations

import json
import shutil
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

from pipeline_filters.demo import recording as invented
from pipeline_filters.demo.recording import Recording
from pipeline_filters.demo.spec_text import SPEC_TEXT
from pipeline_filters.errors import CommandLineError, Problem, SurroundingsError
from pipeline_filters.product.files import write_file

_MARK = {"made_by": "pipeline-filters demo", "layout": 1}
_REMEDY = "name another folder, or take this one away by hand"


@dataclass(frozen=True)
class DemoFolder:
    """The paths of everything that a demo lays down."""

    path: Path

    @property
    def mark(self) -> Path:
        """Tells a demo's folder from any other."""
        return self.path / "made-by-demo.json"

    @property
    def source(self) -> Path:
        """The invented recording."""
        return self.path / "recording.zarr"

    @property
    def spec(self) -> Path:
        """What is done to it."""
        return self.path / "gravel-band.yaml"

    @property
    def product(self) -> Path:
        """What came of it."""
        return self.path / "filtered.zarr"

    @property
    def picture(self) -> Path:
        """The story in one picture."""
        return self.path / "what-happened.png"

    def claim(self) -> None:
        """Makes the folder this demo's, or sees that it is.

        Raises:
            CommandLineError: something else lies there, or a spec that was changed; nothing
                is touched then.
            SurroundingsError: it cannot be written.
        """
        with written(self.path):
            if self.path.exists() and not self.path.is_dir():
                raise self._refusal("a file lies there")
            if self.path.is_dir() and any(self.path.iterdir()):
                self._refuse_foreign()
            self.path.mkdir(parents=True, exist_ok=True)
            if not self.mark.exists():
                write_file(str(self.mark), json.dumps(_MARK).encode())
            if not self.spec.exists():
                write_file(str(self.spec), SPEC_TEXT.encode())

    def recording(self) -> tuple[Recording, bool]:
        """The recording; made where it is not there yet.

        Returns:
            the recording, and whether it was there before.

        Raises:
            CommandLineError: what is there is not as a demo left it.
            SurroundingsError: it cannot be written.
        """
        before = self.source.exists()
        with written(self.source):
            if not before:
                partial = self.source.with_name(self.source.name + ".partial")
                shutil.rmtree(partial, ignore_errors=True)  # of a demo that was stopped
                invented.write(invented.invent(), partial)
                partial.rename(self.source)
        try:
            return invented.read(self.source), before
        except (LookupError, TypeError, ValueError, OSError, RuntimeError) as error:
            detail = str(error).partition("\n")[0] or type(error).__name__
            found = f"the recording is not as the demo left it ({detail})"
            raise self._refusal(found, self.source) from error

    def _refuse_foreign(self) -> None:
        try:
            mark = json.loads(self.mark.read_text(encoding="utf-8"))
        except (OSError, ValueError):
            mark = None
        if mark is None or not isinstance(mark, dict) or mark.get("made_by") != _MARK["made_by"]:
            raise self._refusal("the folder holds something that is no demo's")
        if mark != _MARK:
            raise self._refusal("the folder holds the demo of another version of this program")
        if self.spec.exists() and self.spec.read_bytes() != SPEC_TEXT.encode():
            raise CommandLineError(
                Problem(
                    str(self.spec),
                    "the spec was changed; a demo would not tell of it truly",
                    "the spec as the demo wrote it",
                    "filter with it by the command filter, or keep it under another name",
                )
            )

    def _refusal(self, found: str, where: Path | None = None) -> CommandLineError:
        allowed = "a new folder, or an earlier demo's"
        return CommandLineError(Problem(str(where or self.path), found, allowed, _REMEDY))


@contextmanager
def written(path: Path) -> Iterator[None]:
    """Turns what the operating system refuses into a refusal.

    Raises:
        SurroundingsError: naming the path and what the system said.
    """
    try:
        yield
    except OSError as error:
        raise SurroundingsError(
            Problem(
                str(path),
                f"cannot be written: {error.strerror or error}",
                "a folder that can be written, with 40 MB of room",
                "name another folder, or put this right, and run again",
            )
        ) from error
