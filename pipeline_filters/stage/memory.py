"""How much memory a worker needs, and how many workers a budget holds."""

from __future__ import annotations

from collections.abc import Iterable
from math import prod

from pipeline_filters.chain.model import TapsStage
from pipeline_filters.errors import BudgetError, Problem
from pipeline_filters.kernels.overlap_add import BATCH_BYTES
from pipeline_filters.layout import without
from pipeline_filters.spans import PIECE_SAMPLES
from pipeline_filters.stage.compiling import CompiledResult

MIB = 1 << 20
# An interpreter with the libraries loaded and nothing done: 130 to 160 MiB were seen.
IDLE_BYTES = 160 * MIB


def step_bytes(compiled: CompiledResult) -> int:
    """What one worker holds at most above an idle interpreter, while it runs a span.

    The sum of all that lives at once: a read and its decoding, undecoded samples kept for
    digests, pieces on their way through the kernels, and a unit being filled and encoded.
    """
    reader, grid = compiled.reader, compiled.grid
    rows = compiled.rows
    raw = rows * reader.dtype.itemsize
    read = reader.chunk_samples * max(1, PIECE_SAMPLES // (rows * reader.chunk_samples))
    read = min(read, reader.length)
    chunk = prod(without(reader.chunks, reader.time_dim)) * reader.dtype.itemsize
    reading = read * raw + min(read, reader.chunk_samples) * max(chunk, raw)
    unit = min(grid.time_unit, reader.length)
    keeping = (2 * unit + read) * raw
    filling = 3 * unit * rows * compiled.dtype.itemsize
    working = compiled.chain.dtype.itemsize
    piece = min(max(4096 * rows, PIECE_SAMPLES), read * rows)
    flowing = 6 * piece * working
    for stage in compiled.chain.stages:
        if isinstance(stage, TapsStage):
            held = 4 * stage.hop + 3 * stage.taps.size
            flowing += rows * held * working + 2 * max(BATCH_BYTES, 16 * stage.transform)
        else:
            flowing += rows * 3 * min(stage.rest, reader.length) * 8 + 2 * piece * 8
    stamps = 0 if reader.stamps is None else 4 * max(unit, reader.stamps.chunk_samples) * 8
    return reading + keeping + filling + flowing + stamps


def workers_within(
    compiled: Iterable[CompiledResult], workers: int, budget_bytes: int | None
) -> tuple[int, int]:
    """How many workers a budget for the whole run holds, and what each may use at most.

    Raises:
        BudgetError: it cannot hold one; a budget that can is named.
    """
    one_bytes = IDLE_BYTES + max((step_bytes(one) for one in compiled), default=0)
    if budget_bytes is None:
        return workers, one_bytes
    if budget_bytes < one_bytes:
        enough = -(-one_bytes // MIB)
        raise BudgetError(
            Problem(
                "--memory",
                f"{budget_bytes / MIB:.4g} MiB cannot hold one step, which takes {enough} MiB",
                f"at least {enough} MiB for this spec and source",
                f"state --memory '{enough} MiB', or give the results smaller chunks",
            )
        )
    # With worker processes, the one that hands out the work is there as well.
    beside = (budget_bytes - IDLE_BYTES) // one_bytes
    return max(1, min(workers, beside)), one_bytes
