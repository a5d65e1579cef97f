"""Spans end to end: the same bits whatever the units, spans and chunks of the source."""

from __future__ import annotations

import hashlib
from dataclasses import replace
from fractions import Fraction

import dask
import dask.threaded
import numpy as np
import pytest
import zarr

from pipeline_filters.chain.building import build_chain
from pipeline_filters.chain.model import Chain
from pipeline_filters.design.designing import design_filter
from pipeline_filters.errors import SourceError
from pipeline_filters.graph.span_tasks import run_graph
from pipeline_filters.layout import Stretches, UnitGrid, plan_spans
from pipeline_filters.source.zarr_source import open_zarr_source
from pipeline_filters.spans import Job, SpanRecord, run_span
from pipeline_filters.spec.model import Amount, Blocks, Filter, Missing, Result, Signal, Spec

LENGTH, CHANNELS = 3000, 5


class MemoryWriter:
    """Takes whole units, each once, into arrays."""

    def __init__(self, shape: tuple[int, ...]) -> None:
        self.values = np.full(shape, -1.0)
        self.stamps_ns = np.zeros(shape[0], np.int64)
        self.written = np.zeros(shape, int)

    def write(self, start, stop, box, values):
        self.values[start:stop, box[0]] = values
        self.written[start:stop, box[0]] += 1

    def write_stamps(self, start, stop, stamps_ns):
        self.stamps_ns[start:stop] = stamps_ns


def digest(values, stamps_ns=None):
    return hashlib.sha256(np.ascontiguousarray(values).tobytes()).digest()


def recording(path, chunks):
    rng = np.random.default_rng(3)
    values = rng.standard_normal((LENGTH, CHANNELS)).astype("f4")
    values[1000:1004, 2] = np.nan
    values[2000:2100, 4] = np.nan
    stamps = np.arange(LENGTH) + np.where(np.arange(LENGTH) >= 1700, 370, 0)
    group = zarr.open_group(str(path), mode="w")
    names = ["time", "geophone"]
    group.create_array("velocity", data=values, chunks=chunks, dimension_names=names)
    time = group.create_array("time", data=stamps, chunks=(500,), dimension_names=["time"])
    time.attrs["units"] = "milliseconds since 2026-03-01"
    return str(path)


def signal() -> Signal:
    return Signal(
        "plate",
        "velocity",
        "time",
        Fraction(1000),
        "1 kHz",
        breaks="split",
        missing=Missing("bridge", Amount("5 samples", samples=Fraction(5))),
    )


def chain(timing: str, through: tuple[str, ...]) -> Chain:
    filters = {
        "hum": Filter("hum", "notch", {"centre": Fraction(50), "width": Fraction(8)}),
        "slow": Filter("slow", "moving-average", {"length": Amount("31", samples=Fraction(31))}),
    }
    result = Result("out", "plate", through, timing, "odd")
    blocks = Blocks(hop=Amount("100 samples", samples=Fraction(100)))
    spec = Spec("", "s.yaml", "", {"plate": signal()}, filters, {"out": result}, blocks)
    responses = [design_filter(filters[name], Fraction(1000), timing) for name in through]
    return build_chain(spec, result, responses)


def run(path, the_chain, unit, span_samples, get=dask.get):
    source = open_zarr_source(path, {"plate": signal()})
    reader, axis = source.readers["plate"], source.axis("plate")
    grid = UnitGrid(reader.shape, unit, 0)
    writer = MemoryWriter(reader.shape)
    stretches = Stretches(axis.starts, axis.lengths, axis.numbers)
    job = Job(
        "out",
        the_chain,
        reader,
        writer,
        grid,
        stretches,
        reader.chunk_samples,
        np.dtype(np.float64),
        digest,
        digest,
        lambda start, stop, stamps: stamps,
    )
    boxes = grid.boxes(reader.chunks[1:])
    spans = plan_spans(grid, boxes, span_samples=span_samples, reach_samples=1)
    records: list[SpanRecord] = []
    run_graph({"out": job}, {"out": spans}, get, records.append)
    assert len(records) == len(spans)
    digests = {place: (one, two) for record in records for place, one, two in record.units}
    assert (writer.written == 1).all()
    assert len(digests) == np.prod(grid.counts)
    np.testing.assert_array_equal(writer.stamps_ns, reader.stamps_ns(0, LENGTH))
    return writer.values, digests


@pytest.mark.parametrize(
    ("timing", "through"),
    [
        ("aligned", ("slow",)),
        ("zero-phase", ("hum", "slow")),
        ("causal", ("hum", "slow")),
        ("causal", ("hum",)),
    ],
)
def test_bits_do_not_depend_on_chunks_units_or_spans(tmp_path, timing, through):
    the_chain = chain(timing, through)
    first, digests = run(recording(tmp_path / "a.zarr", (500, 5)), the_chain, (500, 5), 10**9)
    assert np.isnan(first).any()
    assert np.isfinite(first).any()
    other_chunks = recording(tmp_path / "b.zarr", (137, 2))
    for unit, span_samples in [((500, 5), 1), ((64, 2), 300), ((1000, 3), 5000)]:
        get = dask.threaded.get if unit == (64, 2) else dask.get
        values, others = run(other_chunks, the_chain, unit, span_samples, get)
        assert values.tobytes() == first.tobytes()
        if unit == (500, 5):
            assert others == digests


def test_a_result_too_large_for_its_type_is_refused_with_its_place(tmp_path):
    path = recording(tmp_path / "a.zarr", (500, 5))
    zarr.open_array(path + "/velocity", mode="r+")[700, 1] = 3e38
    gain = Filter("gain", "taps", {"taps": (4.0,)})
    spec_signal = signal()
    result = Result("out", "plate", ("gain",), "causal", "zero")
    spec = Spec("", "s", "", {"plate": spec_signal}, {"gain": gain}, {"out": result}, Blocks())
    the_chain = build_chain(spec, result, [design_filter(gain, Fraction(1000), "causal")])
    source = open_zarr_source(path, {"plate": spec_signal})
    reader, axis = source.readers["plate"], source.axis("plate")
    grid = UnitGrid(reader.shape, (500, 5), 0)
    job = Job(
        "out",
        the_chain,
        reader,
        MemoryWriter(reader.shape),
        grid,
        Stretches(axis.starts, axis.lengths, axis.numbers),
        500,
        np.dtype(np.float32),
        digest,
        digest,
        lambda start, stop, stamps: stamps,
    )
    span = plan_spans(grid, grid.boxes((5,)), span_samples=10**9, reach_samples=1)[0]
    record, _ = run_span(job, span, None)
    assert record.refused is not None
    with pytest.raises(SourceError, match="too large"):
        run_graph({"out": job}, {"out": [span]}, dask.get, print)
    assert "geophone 1, 2026-03-01T00:00:00.7: result out is too large" in str(record.refused)
    wide = replace(job, dtype=np.dtype(np.float64))
    assert run_span(wide, span, None)[0].refused is None
