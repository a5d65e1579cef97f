"""``pipeline-filters``: reads the arguments, calls a command, turns what ends it into a code."""

from __future__ import annotations

import argparse
import difflib
import importlib
import io
import json
import os
import re
import signal
import sys
from typing import Any, NoReturn

from pipeline_filters.errors import (
    CommandLineError,
    FilterStageError,
    Problem,
    StoppedEarlyError,
    SurroundingsError,
)

EXIT_CODES = """\
exit codes:
  0   done, or nothing to do
  2   the command line is wrong, or its memory budget cannot hold one step
  3   the spec is refused
  4   the source does not fit the spec, or cannot be read
  5   the product is refused
  6   a filter or a chain cannot meet its stated tolerance
  7   another run holds the product
  8   the surroundings refuse; a person must act
  75  stopped early; run again and it continues
  1   a defect of this program; its traceback goes to a file
"""

CAUTION = """\
Filtering delays and removes information. Take no protective, medical or structural decision
on filtered data alone; follow local codes and licensed practice.
"""


COMMANDS = ("check", "forecast", "filter", "demo")

# More than any one machine has cores for.
MOST_WORKERS = 4096


class _Parser(argparse.ArgumentParser):
    def error(self, message: str) -> NoReturn:
        # The same form as every other refusal.
        remedy = f"see {self.prog} --help"
        choice = re.match(r"argument COMMAND: invalid choice: '([^']*)'", message)
        if choice:
            message = f"no command {choice[1]}"
            near = difflib.get_close_matches(choice[1], COMMANDS, n=1)
            remedy = f"did you mean {near[0]}?" if near else f"one of {', '.join(COMMANDS)}"
        raise CommandLineError(Problem("command line", message, "", remedy))


def build_parser() -> argparse.ArgumentParser:
    """All commands and options; nothing heavy is loaded."""
    # Words in full: a shortened --json would be taken by some and not by others.
    parser = _Parser(
        prog="pipeline-filters",
        allow_abbrev=False,
        description="Filters long multi-channel recordings in chunked Zarr stores, as a spec says; "
        "the numbers depend on spec and data alone.",
        epilog=f"{EXIT_CODES}\n{CAUTION}",
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    parser.add_argument("--version", action="store_true", help="print the version and end")
    commands = parser.add_subparsers(dest="command", metavar="COMMAND")
    spec = {"metavar": "SPEC", "type": _path, "help": "the YAML filter spec"}
    source = {
        "metavar": "SOURCE",
        "type": _path,
        "help": "a Zarr store, or a group in one (store.zarr/group)",
    }

    def add_command(name: str, help: str) -> argparse.ArgumentParser:
        return commands.add_parser(name, help=help, allow_abbrev=False)

    check = add_command(
        "check", help="design the filters of a spec and hold them to what they promise"
    )
    check.add_argument("spec", **spec)  # type: ignore[arg-type]
    check.add_argument("source", nargs="?", **source)  # type: ignore[arg-type]

    forecast = add_command("forecast", help="say what a run will do and cost; reads no sample")
    forecast.add_argument("spec", **spec)  # type: ignore[arg-type]
    forecast.add_argument("source", **source)  # type: ignore[arg-type]

    run = add_command(
        "filter", help="filter a source into a product; again, do what is missing and no more"
    )
    run.add_argument("spec", **spec)  # type: ignore[arg-type]
    run.add_argument("source", **source)  # type: ignore[arg-type]
    run.add_argument("product", metavar="PRODUCT", type=_path, help="the folder of the results")

    demo = add_command(
        "demo", help="make a small invented recording, filter it, and draw what happened"
    )
    demo.add_argument(
        "folder",
        nargs="?",
        type=_path,
        default="weir-demo",
        metavar="FOLDER",
        help="where everything is laid down (default: weir-demo); new, or an earlier demo's",
    )

    for command in (forecast, run, demo):
        command.add_argument(
            "--workers",
            type=_count,
            metavar="N",
            help="worker processes (default: one for each processor core)",
        )
        if command is not demo:
            command.add_argument(
                "--memory",
                metavar="AMOUNT",
                help="for the whole run, such as '2 GiB'; fewer workers are taken if it is short",
            )
    for command in (check, forecast, run, demo):
        command.add_argument(
            "--json", action="store_true", help="print one record for machines instead of words"
        )
    return parser


def _count(text: str) -> int:
    digits = text.isascii() and text.isdigit() and len(text) <= len(str(MOST_WORKERS))
    if not digits or not 1 <= int(text) <= MOST_WORKERS:
        raise argparse.ArgumentTypeError(
            f"{text[:40]!r} is no whole number from 1 to {MOST_WORKERS}"
        )
    return int(text)


def _path(text: str) -> str:
    # An empty path, as of a shell variable that is not set, would mean the current folder.
    if not text.strip():
        raise argparse.ArgumentTypeError("an empty path")
    return text


def main(arguments: list[str] | None = None) -> int:
    """Runs one command.

    Returns:
        the exit code.
    """
    given = sys.argv[1:] if arguments is None else arguments
    as_json = "--json" in given
    try:
        return _called(given)
    except FilterStageError as error:
        return _refused(error, as_json)
    except KeyboardInterrupt:
        stopped = StoppedEarlyError(Problem("", "stopped early", "", "run again to continue"))
        return _refused(stopped, as_json)
    except BrokenPipeError:  # whoever read what is printed has gone
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return StoppedEarlyError.exit_code
    except MemoryError:
        found = "the machine's memory is used up"
        remedy = "run again with fewer --workers or a lower --memory, or end other programs"
        return _refused(SurroundingsError(Problem("", found, "", remedy)), as_json)
    except Exception as error:
        return _defect(error, as_json)


def _called(given: list[str]) -> int:
    parser = build_parser()
    options = parser.parse_args(given)
    if options.version:
        from importlib.metadata import version

        print(f"pipeline-filters {version('pipeline-filters')}")
        return 0
    if options.command is None:
        parser.print_help()
        return CommandLineError.exit_code
    signal.signal(signal.SIGTERM, _stop)
    command = importlib.import_module(f"pipeline_filters.cli.{options.command}")
    command.call(options)
    sys.stdout.flush()
    return 0


def _stop(number: int, frame: Any) -> NoReturn:
    del number, frame
    raise KeyboardInterrupt


def _refused(error: FilterStageError, as_json: bool) -> int:
    if as_json:
        problems = [vars(problem) for problem in error.problems]
        record = {"record_version": 1, "did": "refuse", "problems": problems}
        print(json.dumps({**record, "exit_code": error.exit_code}, indent=2))
    for problem in error.problems:
        print(problem, file=sys.stderr)
    return error.exit_code


def _defect(error: Exception, as_json: bool) -> int:
    import tempfile
    import traceback

    with tempfile.NamedTemporaryFile(
        "w", prefix="pipeline-filters-defect-", suffix=".txt", delete=False, encoding="utf-8"
    ) as file:
        traceback.print_exception(error, file=file)
    found = f"a defect of this program ({type(error).__name__}); its traceback is in {file.name}"
    if as_json:
        problem = vars(Problem("", found, "", "report it with that file"))
        print(
            json.dumps(
                {"record_version": 1, "did": "refuse", "problems": [problem], "exit_code": 1},
                indent=2,
            )
        )
    print(f"{found}; report it with that file", file=sys.stderr)
    return 1


def console() -> NoReturn:
    """The installed command."""
    # A path may hold what the terminal's encoding has no sign for.
    if isinstance(sys.stdout, io.TextIOWrapper):
        sys.stdout.reconfigure(errors="backslashreplace")
    sys.exit(main())
