"""Spans as Dask tasks: one task a span, carries handed on within a group of channels.

Tasks carry names and integers only; the jobs they name are adopted once by each process.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from typing import Any

from dask.callbacks import Callback

from pipeline_filters.layout import Span
from pipeline_filters.spans import Carry, Job, Jobs, SpanRecord, run_span

# Dask takes up independent tasks by falling keys: keys that count down along time let results
# appear from the start on. Nothing but that order hangs on it.
_LATEST = 10**15 - 1

_adopted: dict[str, Job] = {}

Key = tuple[str, int, str, int]
Graph = dict[Key, tuple[Any, ...]]


def adopt(jobs: Jobs) -> None:
    """Makes this process know the jobs that tasks name; the initializer of a worker."""
    _adopted.clear()
    _adopted.update(jobs)


def run_named(
    result: str, span: Span, before: tuple[SpanRecord, Carry | None] | None
) -> tuple[SpanRecord, Carry | None]:
    """One task: the span of an adopted job, after the span before where there is a carry."""
    carry = None
    if before is not None:
        if before[0].refused is not None:  # what follows a refusal is not begun
            return SpanRecord(result, refused=before[0].refused), None
        carry = before[1]
    return run_span(_adopted[result], span, carry)


def span_graph(jobs: Jobs, spans: Mapping[str, Sequence[Span]]) -> tuple[Graph, list[Key]]:
    """The graph of all results' spans, and the keys that ask for all of it.

    Spans of a chain with a recursion follow one another within their channels; all others
    are independent.
    """
    graph: Graph = {}
    asked: list[Key] = []
    for result, job in jobs.items():
        last: dict[str, Key] = {}
        group: dict[str, int] = {}
        for span in spans[result]:
            box = repr(span.box)
            key = ("span", _LATEST - span.first_unit, result, group.setdefault(box, len(group)))
            before = None if job.chain.independent else last.get(box)
            graph[key] = (run_named, result, span, before)
            last[box] = key
            if job.chain.independent:
                asked.append(key)
        if not job.chain.independent:
            asked += last.values()
    return graph, asked


def run_graph(
    jobs: Jobs,
    spans: Mapping[str, Sequence[Span]],
    get: Callable[..., Any],
    took: Callable[[SpanRecord], None],
) -> None:
    """Runs all spans with a Dask scheduler's ``get``; hands each record on as it comes.

    Raises:
        FilterStageError: the first refusal of a span; what is under way is given up.
    """
    adopt(jobs)
    graph, asked = span_graph(jobs, spans)

    def done(key: Key, value: tuple[SpanRecord, Carry | None], *_: object) -> None:
        del key
        if value[0].refused is not None:
            raise value[0].refused
        took(value[0])

    with Callback(posttask=done):  # type: ignore[no-untyped-call]
        get(graph, asked)
