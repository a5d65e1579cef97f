"""The tree of errors: each class knows its exit code, each problem says what to do.

A refusal is for the person who must act, so it is made of `Problem`s: where, what
was found, what is allowed, and one remedy. One error may carry many problems.
"""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, order=True)
class Problem:
    """One thing that is wrong, for the person who must act.

    Attributes:
        where: ``file:line:column`` in a spec; a variable, channel and time in data;
            a path in a store. May be empty where there is no place.
        found: what was found there.
        allowed: what is allowed there. May be empty.
        remedy: one thing to do. May be empty.
    """

    where: str
    found: str
    allowed: str = ""
    remedy: str = ""

    def __str__(self) -> str:
        text = "; ".join(part for part in (self.found, self.allowed, self.remedy) if part)
        return f"{self.where}: {text}" if self.where else text


class FilterStageError(Exception):
    """The base of every refusal. ``exit_code`` is what the command line ends with."""

    exit_code = 1

    def __init__(self, *problems: Problem) -> None:
        super().__init__(*problems)
        self.problems: tuple[Problem, ...] = problems

    def __str__(self) -> str:
        return "\n".join(str(problem) for problem in self.problems)


class CommandLineError(FilterStageError):
    """The command line is wrong."""

    exit_code = 2


class BudgetError(CommandLineError):
    """The memory budget cannot hold one step; the message names one that can."""


class SpecError(FilterStageError):
    """The spec is refused."""

    exit_code = 3


class SourceError(FilterStageError):
    """The source does not fit the spec, or cannot be read."""

    exit_code = 4


class ProductError(FilterStageError):
    """The product is refused: another spec's result, not ours, or damaged."""

    exit_code = 5


class ToleranceError(FilterStageError):
    """A designed filter or a chain cannot meet its stated tolerance."""

    exit_code = 6


class HeldError(FilterStageError):
    """Another run holds the product."""

    exit_code = 7


class SurroundingsError(FilterStageError):
    """The surroundings refuse (target full, not writable); a person must act."""

    exit_code = 8


class StoppedEarlyError(FilterStageError):
    """Stopped early; run again and it continues."""

    exit_code = 75
