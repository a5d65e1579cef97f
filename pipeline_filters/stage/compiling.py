"""A spec's results, each joined with its chain, its reader and its place in a product."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property, partial
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pipeline_filters.chain.building import design_chains
from pipeline_filters.chain.model import Chain
from pipeline_filters.errors import Problem, SpecError
from pipeline_filters.layout import Box, Span, Stretches, UnitGrid, box_rows, plan_spans, without
from pipeline_filters.product.digest import unit_digest
from pipeline_filters.product.plan import ProductState, ResultPlan, ResultState
from pipeline_filters.product.store import read_coefficients
from pipeline_filters.source.axis import Axis
from pipeline_filters.source.readers import SignalReader, Source
from pipeline_filters.spans import Job, Writer
from pipeline_filters.spec.digests import result_digest
from pipeline_filters.spec.findings import did_you_mean
from pipeline_filters.spec.model import Result, Spec
from pipeline_filters.stage.figures import chain_figures

# Values in a span: some seconds of work, so that starting one costs nothing beside it.
SPAN_SAMPLES = 1 << 26
# Spans for each worker, so that none waits long for the last.
SPANS_PER_WORKER = 4


@dataclass(frozen=True, eq=False)
class CompiledResult:
    """One result: what it is made of, and where it goes.

    Attributes:
        result: as the spec states it.
        digest: of what its numbers depend on.
        chain: designed, or as the product keeps it.
        figures: of the chain, as `chain_figures` gives them.
        source, reader: where its samples come from.
        stored: the result in an existing product; None where it is not there.
    """

    result: Result
    digest: str
    chain: Chain
    figures: Mapping[str, Any]
    source: Source
    reader: SignalReader
    stored: ResultState | None

    @property
    def dtype(self) -> np.dtype[Any]:
        """Of the results as kept: stated, or the signal's float type, float32 for integers."""
        if self.result.keep_as is not None:
            return np.dtype(self.result.keep_as)
        own = self.reader.dtype
        return np.dtype("f8" if own.kind == "f" and own.itemsize == 8 else "f4")

    @cached_property
    def axis(self) -> Axis:
        """The checked time axis; checked when it is first asked for.

        Raises:
            SourceError: the axis is refused.
        """
        return self.source.axis(self.result.signal)

    @cached_property
    def stretches(self) -> Stretches:
        """The stretches of the axis."""
        return Stretches(self.axis.starts, self.axis.lengths, self.axis.numbers)

    @cached_property
    def plan(self) -> ResultPlan:
        """Its place in a product, were it made now."""
        arrays = self.chain.to_store()
        return ResultPlan(
            name=self.result.name,
            dims=self.reader.dims,
            shape=self.reader.shape,
            dtype=self.dtype.name,
            chunks=self._chunks(),
            shards=None if self.result.chunks else self.reader.shards,
            time_dim=self.reader.time_dim,
            axis_kind=self.axis_kind,
            attrs=self._attrs(),
            coords=self.reader.channel_coords(),
            digest=self.digest,
            facts={"chain": arrays[0], "figures": dict(self.figures)},
            coefficients=arrays[1],
        )

    @property
    def axis_kind(self) -> Any:
        """stamped, elapsed or counted."""
        return self.reader.kind

    @property
    def grid(self) -> UnitGrid:
        """The storage units: of the existing product where there is one."""
        place = self.stored or self.plan
        return UnitGrid(place.shape, place.unit, place.time_dim)

    @property
    def boxes(self) -> list[Box]:
        """The groups of channels that are filtered together."""
        return self.grid.boxes(without(self.reader.chunks, self.reader.time_dim))

    @property
    def rows(self) -> int:
        """Channels in the largest group."""
        return max(map(box_rows, self.boxes))

    def spans(self, workers: int, span_samples: int | None = None) -> list[Span]:
        """The work, cut so that every worker has several spans; the numbers do not depend on it."""
        if span_samples is not None:
            return plan_spans(self.grid, self.boxes, span_samples=span_samples, reach_samples=0)
        chain = self.chain
        values = int(np.prod(self.grid.shape))
        share = values // (SPANS_PER_WORKER * workers) + 1
        # A span decodes the chunks at its edges that its neighbours decode too.
        chunk, length = self.reader.chunk_samples, self.reader.length
        return plan_spans(
            self.grid,
            self.boxes,
            span_samples=min(SPAN_SAMPLES, share),
            reach_samples=sum(chain.reach().block_reach) if chain.independent else 0,
            least_samples=max(chunk, min(8 * chunk, length // workers)),
        )

    def job(self, writer: Writer) -> Job:
        """What the spans of this result share."""
        reader = self.reader
        meaning = repr(sorted(reader.decoding.facts().items())).encode()
        return Job(
            result=self.result.name,
            chain=self.chain,
            reader=reader,
            writer=writer,
            grid=self.grid,
            stretches=self.stretches,
            chunk_samples=reader.chunk_samples,
            dtype=self.dtype,
            input_digest=partial(unit_digest, attrs_bytes=meaning),
            output_digest=partial(unit_digest, stamps_ns=None),
            stamps=HalfSampleLater(self.axis) if self.chain.half_sample else as_they_are,
        )

    def last_stamp(self) -> int | None:
        """Stamp of the last result in ns; for a counted axis, how many there are."""
        length = self.reader.length
        if self.axis_kind == "counted":
            return length
        if self.chain.half_sample:
            return int(self.axis.stamps_at(length - 1, length, 1)[0])
        stamps = self.reader.stamps_ns(length - 1, length)
        return None if stamps is None else int(stamps[0])

    def _chunks(self) -> tuple[int, ...]:
        stated = self.result.chunks or {}
        unknown = sorted(set(stated) - set(self.reader.dims))
        if unknown:
            where = str(self.result.place or f"result {self.result.name}")
            raise SpecError(
                *(
                    Problem(
                        where,
                        f"chunks: its signal has no dimension {name}",
                        f"it has {', '.join(self.reader.dims)}",
                        did_you_mean(name, self.reader.dims, "name one of them"),
                    )
                    for name in unknown
                )
            )
        return tuple(
            min(stated.get(dim, chunk), n)
            for dim, chunk, n in zip(
                self.reader.dims, self.reader.chunks, self.reader.shape, strict=True
            )
        )

    def _attrs(self) -> dict[str, Any]:
        reader = self.reader
        attrs = {}
        if "units" in reader.attrs:
            attrs["units"] = str(reader.attrs["units"])
        name = self.result.title or reader.attrs.get("long_name") or reader.signal.variable
        attrs["long_name"] = f"{name}, filtered" if not self.result.title else name
        return attrs


class HalfSampleLater:
    """Stamps of results that lie half a sample after their inputs, computed in integers."""

    def __init__(self, axis: Axis) -> None:
        self.axis = axis

    def __call__(self, start: int, stop: int, stamps_ns: NDArray[np.int64]) -> NDArray[np.int64]:
        """Stamps of results [start, stop), int64 ns."""
        del stamps_ns
        return self.axis.stamps_at(start, stop, 1)


def as_they_are(start: int, stop: int, stamps_ns: NDArray[np.int64]) -> NDArray[np.int64]:
    """Stamps of results that keep those of their inputs."""
    del start, stop
    return stamps_ns


Chains = dict[str, tuple[Chain, Mapping[str, Any]]]


def chains_of(
    spec: Spec, product: str | Path | None = None, state: ProductState | None = None
) -> tuple[Chains, dict[str, ResultState]]:
    """The chain of every result with its figures: as a product keeps it, else designed now.

    Returns:
        the chains by result, and the results that the product has already.

    Raises:
        SpecError, ToleranceError: what cannot be designed.
        ProductError: coefficients that cannot be read.
    """
    stored = {
        name: result
        for name, result in (state.results if state else {}).items()
        if name in spec.results and result.digest == result_digest(spec, name)
    }
    chains: Chains = {}
    for name, result in stored.items():
        assert product is not None
        kept = read_coefficients(Path(product), name)
        chains[name] = Chain.from_store(result.facts["chain"], kept), result.facts["figures"]
    designed = design_chains(spec, set(spec.results) - set(stored))
    chains |= {name: (chain, chain_figures(chain)) for name, chain in designed.items()}
    return chains, stored


def used_signals(spec: Spec) -> dict[str, Any]:
    """The signals that results are made from."""
    used = {result.signal for result in spec.results.values()}
    return {name: signal for name, signal in spec.signals.items() if name in used}


def compile_results(
    spec: Spec, source: Source, chains: Chains, stored: Mapping[str, ResultState]
) -> dict[str, CompiledResult]:
    """Joins every result with its source.

    Raises:
        SpecError: chunks stated along dimensions that a signal does not have; all of them.
    """
    compiled = {
        name: CompiledResult(
            result,
            result_digest(spec, name),
            *chains[name],
            source,
            source.readers[result.signal],
            stored.get(name),
        )
        for name, result in spec.results.items()
    }
    problems: list[Problem] = []
    for one in compiled.values():
        try:
            _ = one.plan
        except SpecError as error:
            problems += error.problems
    if problems:
        raise SpecError(*problems)
    return compiled
