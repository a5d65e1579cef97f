"""A spec's results over an xarray Dataset, as dask arrays with the Dataset's own chunks."""

from __future__ import annotations

from functools import cached_property
from typing import TYPE_CHECKING, Any

from pipeline_filters.graph.lazy import LazyJob, as_dask, lazy_result
from pipeline_filters.graph.lazy_dataset import as_stamps, joined_results, one_result
from pipeline_filters.source.dataset_source import (
    DatasetReader,
    open_dataset_source,
    without_samples,
)
from pipeline_filters.spec.model import Spec
from pipeline_filters.stage.compiling import (
    CompiledResult,
    chains_of,
    compile_results,
    used_signals,
)
from pipeline_filters.stage.forecasting import PathLike, as_spec

if TYPE_CHECKING:
    import xarray as xr


class CompiledSpec:
    """A spec fitted to a Dataset; nothing is computed until its results are.

    Attributes:
        spec: the spec.
        figures: of each result's chain: taps, delay, reach, bands.
    """

    def __init__(self, spec: Spec, dataset: xr.Dataset) -> None:
        self.spec = spec
        chains, _ = chains_of(spec)
        self.figures: dict[str, Any] = {name: dict(own) for name, (_, own) in chains.items()}
        source = open_dataset_source(dataset, used_signals(spec))
        self._compiled = compile_results(spec, source, chains, {})
        self._dataset = dataset

    @cached_property
    def results(self) -> xr.Dataset | xr.DataTree:
        """All results, lazy: a Dataset, or a DataTree with a node for each where axes differ.

        Chunks are the Dataset's: one task a chunk, two for a chain with a recursion. The bits
        are those that a product has.
        """
        return joined_results({name: self._result(one) for name, one in self._compiled.items()})

    def _result(self, one: CompiledResult) -> xr.Dataset:
        reader = one.reader
        assert isinstance(reader, DatasetReader)
        samples = as_dask(reader.array)
        job = LazyJob(one.result.name, one.chain, without_samples(reader, one.axis), one.dtype)
        values = lazy_result(job, samples, one.stretches, one.digest)
        coords: dict[str, Any] = dict(one.plan.coords)
        time = reader.dims[reader.time_dim]
        if one.chain.half_sample and one.axis_kind != "counted":
            later = one.axis.stamps_at(0, reader.length, 1)
            coords[time] = as_stamps(later, one.axis_kind, time)
        elif time in self._dataset.variables:
            coords[time] = self._dataset.variables[time]
        return one_result(one.result.name, reader.dims, values, one.plan.attrs, coords)


def compile_spec(spec: Spec | PathLike, dataset: xr.Dataset) -> CompiledSpec:
    """Fits a spec to an xarray Dataset, for use inside a graph of one's own.

    Args:
        spec: a spec, its path, or its text.
        dataset: with samples as they are stored (``mask_and_scale=False``), or with floats
            that need no scaling; chunked data stays lazy.

    Raises:
        SpecError, ToleranceError, SourceError: what is refused, all of it at once.
    """
    return CompiledSpec(as_spec(spec), dataset)
