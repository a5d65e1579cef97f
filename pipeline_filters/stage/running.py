"""Store to store: what is missing in a product is made, and nothing more."""

from __future__ import annotations

import os
import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np

from pipeline_filters.errors import Problem, SourceError, StoppedEarlyError
from pipeline_filters.graph.span_tasks import run_graph
from pipeline_filters.graph.workers import schedulers
from pipeline_filters.layout import Span, UnitGrid
from pipeline_filters.product.refusals import refuse_overlap
from pipeline_filters.product.register import Register
from pipeline_filters.product.store import Product
from pipeline_filters.product.surroundings import surroundings
from pipeline_filters.source.zarr_source import open_zarr_source
from pipeline_filters.spans import SpanRecord, peak_bytes
from pipeline_filters.spec.model import Spec
from pipeline_filters.stage.ahead import start_workers_early
from pipeline_filters.stage.compiling import (
    CompiledResult,
    chains_of,
    compile_results,
    used_signals,
)
from pipeline_filters.stage.figures import across_channels
from pipeline_filters.stage.forecasting import (
    PathLike,
    as_spec,
    facts,
    head,
    memory_figures,
    run_figures,
)
from pipeline_filters.stage.memory import workers_within

# How often what is done is written down: a killed run repeats at most this much work.
FLUSH_SECONDS = 2.0

Progress = Callable[[int, int], None]


def run(
    spec: Spec | PathLike,
    source: PathLike,
    product: PathLike,
    *,
    workers: int = 1,
    budget_bytes: int | None = None,
    progress: Progress | None = None,
    span_samples: int | None = None,
) -> dict[str, Any]:
    """Filters a source as a spec says, into a product; run again, it does what is missing.

    The source is taken as complete, and its ends by the ends rule.

    Args:
        workers: processes; 1 is this one alone. With more, the calling script needs no guard
            ``if __name__ == "__main__"``: workers do not run it.
        budget_bytes: memory for the whole run; fewer workers are taken where it is short.
        progress: called with the results' samples done so far and in all.
        span_samples: values in a unit of work; chosen where None. The numbers do not
            depend on it.

    Returns:
        the record, as ``schemas/run-record.schema.json`` describes it.

    Raises:
        FilterStageError: what is refused; ``exit_code`` tells the kind.
    """
    began = time.perf_counter()
    start_workers_early(workers)
    spec = as_spec(spec)
    # First of all: "take away what lies there" must not be said of the source.
    refuse_overlap(product, source)
    state = Product.inspect(product)
    chains, stored = chains_of(spec, product, state)
    opened = open_zarr_source(source, used_signals(spec))
    compiled = compile_results(spec, opened, chains, stored)
    to_do = {
        name: one
        for name, one in compiled.items()
        if one.stored is None or one.stored.state != "ended"
    }
    for one in to_do.values():  # whatever is refused is refused before anything is written
        _ = one.axis
    taken, one_bytes = workers_within(to_do.values(), workers, budget_bytes)
    around = surroundings()
    made = Product.prepare(
        product,
        spec_text=spec.text,
        source_identity={name: reader.identity() for name, reader in opened.readers.items()},
        source_path=source,
        plans=[one.plan for one in compiled.values()],
        surroundings=around,
    )
    record = {
        **head("filter", spec),
        "source": os.fspath(source),
        "product": os.fspath(product),
        "state": "done" if to_do else "nothing to do",
        "results": {name: {**facts(spec, name), **one.figures} for name, one in compiled.items()},
        "surroundings": around,
        "notes": list(made.notes),
    }
    if not to_do:
        return record
    with made.hold():
        work = _Work(made, to_do, taken, span_samples, progress)
        try:
            work.run()
        except SourceError:
            work.close()
            made.discard(name for name, one in to_do.items() if one.stored is None)
            raise
        finally:
            work.close()
    for name, one in work.compiled.items():
        record["results"][name] |= run_figures(one, taken) | work.used(name)
    record["memory"] = memory_figures(taken, one_bytes, budget_bytes) | {
        "peak_bytes_a_worker": work.peak_bytes,
        "peak_bytes_here": peak_bytes(),
    }
    record["seconds"] = time.perf_counter() - began
    return record


@dataclass
class _Tally:
    """What became of one result's spans."""

    spans: list[Span]
    before: int
    records: int = 0
    sums: dict[str, int] = field(default_factory=dict)

    def add(self, record: SpanRecord) -> None:
        self.records += 1
        for name in ("samples_read", "samples_written", "samples_missing", "chunks_decoded"):
            self.sums[name] = self.sums.get(name, 0) + getattr(record, name)


class _Work:
    """One run's work under way: spans to run, marks to write, sums to keep."""

    def __init__(
        self,
        product: Product,
        compiled: Mapping[str, CompiledResult],
        workers: int,
        span_samples: int | None,
        progress: Progress | None,
    ) -> None:
        self.product = product
        # Chunks are the product's from here on.
        self.compiled = {
            name: replace(one, stored=product.results[name]) for name, one in compiled.items()
        }
        self.workers = workers
        self.registers: dict[str, Register] = {}
        self.tallies: dict[str, _Tally] = {}
        self.peak_bytes = 0
        self.progress = progress
        self.done_samples = 0
        self.flushed = time.monotonic()
        for name, one in self.compiled.items():
            self.registers[name] = product.register(name)
            spans = one.spans(workers, span_samples)
            left = _not_done(one, spans, self.registers[name].done())
            self.tallies[name] = _Tally(left, len(spans) - len(left))
        self.total_samples = sum(
            int(np.prod(one.grid.shape))
            * len(self.tallies[name].spans)
            // max(1, len(self.tallies[name].spans) + self.tallies[name].before)
            for name, one in self.compiled.items()
        )

    def run(self) -> None:
        jobs = {name: one.job(self.product.writer(name)) for name, one in self.compiled.items()}
        spans = {name: tally.spans for name, tally in self.tallies.items()}
        self._tell()
        try:
            with schedulers(jobs, self.workers, sum(map(len, spans.values()))) as get:
                run_graph(jobs, spans, get, self._took)
        except KeyboardInterrupt:
            raise StoppedEarlyError(
                Problem(str(self.product.path), "stopped early", "", "run again to continue")
            ) from None
        for name, one in self.compiled.items():
            self.registers[name].flush()
            self.product.end(name, one.last_stamp(), self.tallies[name].sums)

    def close(self) -> None:
        """Writes down what is done, however the run ended."""
        for register in self.registers.values():
            register.flush()

    def used(self, name: str) -> dict[str, Any]:
        """What a result's run took, as it turned out."""
        one, tally = self.compiled[name], self.tallies[name]
        reader = one.reader
        groups = across_channels(one)  # of these, each group of channels decodes all
        chunks = -(-reader.length // reader.chunk_samples) * len(one.boxes) / groups
        sums = dict(tally.sums)
        decoded = sums.pop("chunks_decoded", 0)
        return {
            **sums,
            "spans_run": tally.records,
            "spans_done_before": tally.before,
            "decodings_of_a_chunk_as_run": decoded / chunks if not tally.before else None,
            "published_until": self.product.results[name].published_until,
            "made_under": self.registers[name].mixture(),
        }

    def _tell(self) -> None:
        if self.progress is not None:
            self.progress(self.done_samples, self.total_samples)

    def _took(self, record: SpanRecord) -> None:
        self.tallies[record.result].add(record)
        self.registers[record.result].mark(record.units)
        self.peak_bytes = max(self.peak_bytes, record.peak_bytes)
        self.done_samples += record.samples_written
        self._tell()
        if time.monotonic() - self.flushed > FLUSH_SECONDS:
            for register in self.registers.values():
                register.flush()
            self.flushed = time.monotonic()


def _not_done(one: CompiledResult, spans: list[Span], done: np.ndarray[Any, Any]) -> list[Span]:
    """The spans to run: with a unit that is not done; all of a group where a carry is handed on."""
    grid = one.grid
    left = [span for span in spans if not _is_done(grid, span, done)]
    if one.chain.independent:
        return left
    groups = {repr(span.box) for span in left}
    return [span for span in spans if repr(span.box) in groups]


def _is_done(grid: UnitGrid, span: Span, done: np.ndarray[Any, Any]) -> bool:
    return bool(done[tuple(_unit_slices(grid, span))].all())


def _unit_slices(grid: UnitGrid, span: Span) -> list[slice]:
    sizes = [size for dim, size in enumerate(grid.unit) if dim != grid.time_dim]
    slices = [
        slice(part.start // size, -(-part.stop // size))
        for part, size in zip(span.box, sizes, strict=True)
    ]
    slices.insert(grid.time_dim, slice(span.first_unit, span.stop_unit))
    return slices
