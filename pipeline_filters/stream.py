"""A chain's kernels joined: one result over one stretch, for one group of channels.

A `Stream` is the carry: it can be pushed to any input position, copied, pickled, stored
and taken up again.
"""

from __future__ import annotations

import numpy as np

from pipeline_filters.chain.model import Chain, RecursionStage, Stage, TapsStage
from pipeline_filters.kernels.ends import Extension
from pipeline_filters.kernels.missing import Bridging, Spread
from pipeline_filters.kernels.overlap_add import DirectSum, OverlapAdd
from pipeline_filters.kernels.recursion import Recursion
from pipeline_filters.kernels.slab import Comparable, Samples, Slab, cut_slab, join_slabs
from pipeline_filters.layout import Stretch


class TapsFlow(Comparable):
    """One run of taps: ends extended, convolved in blocks, missing samples spread."""

    def __init__(
        self,
        stage: TapsStage,
        chain: Chain,
        rows: int,
        *,
        number: int,
        emit_from: int,
        at_start: bool,
    ) -> None:
        before = stage.taps.size - 1 - stage.lead
        start = number - before if at_start else number
        first = emit_from + stage.lead
        self.rows = rows
        self.extension = Extension(
            rows, chain.ends, before=before, after=stage.lead, at_start=at_start
        )
        self.convolution: OverlapAdd | DirectSum
        if stage.hop == 1:
            self.convolution = DirectSum(
                rows, stage.taps, start=start, emit_from=first, dtype=chain.dtype
            )
        else:
            self.convolution = OverlapAdd(
                rows,
                stage.taps,
                hop=stage.hop,
                transform=stage.transform,
                start=start,
                emit_from=first,
                dtype=chain.dtype,
            )
        self.spread = Spread(
            start,
            first,
            back=stage.lead + stage.support_before,
            ahead=stage.lead - stage.support_after,
        )

    def push(self, slab: Slab) -> Slab:
        """Takes the next samples; gives the results now published."""
        return self._through(self.extension.push(slab))

    def finish(self) -> Slab:
        """The stretch has ended: the rest of the results."""
        last = self._through(self.extension.finish())
        values = self.convolution.finish()
        return join_slabs([last, Slab(values, self.spread.take(self.rows, values.shape[1]))])

    def _through(self, extended: Slab) -> Slab:
        self.spread.push(extended.length, extended.missing)
        values = self.convolution.push(extended.values)
        return Slab(values, self.spread.take(self.rows, values.shape[1]))


class Stream(Comparable):
    """Results of one chain over one stretch, from result ``start`` on.

    Args:
        rows: channels.
        start, stop: offsets of the first result wanted and the one after the last. A chain
            with a recursion always starts at 0.

    Attributes:
        next_input: offset of the sample to be pushed next.
        next_result: offset of the result that comes next.
    """

    def __init__(self, chain: Chain, rows: int, stretch: Stretch, start: int, stop: int) -> None:
        first = chain.reach().first_offset(stretch, start, stop) if chain.independent else 0
        self.next_input = first
        self.next_result = start
        self.length = stretch.length
        self.bridging = Bridging(rows, bridge=chain.bridge, line=chain.line)
        self.to_drop = self.bridging.look_back if first else 0
        number = stretch.number + first + self.to_drop
        emit_from = stretch.number + start
        self.flows = [
            _flow(stage, chain, rows, number=number, emit_from=emit_from, at_start=not first)
            for stage in chain.stages
        ]

    @property
    def ended(self) -> bool:
        """Whether every result of the stretch has been given."""
        return self.next_result >= self.length

    def push(self, rows: Samples) -> Slab:
        """Takes the next samples, shape (rows, n), NaN where missing; gives results.

        At the stretch's last sample the rest of its results is given too.
        """
        self.next_input += rows.shape[1]
        slab = self._without_dropped(self.bridging.push(rows))
        for flow in self.flows:
            slab = flow.push(slab)
        parts = [slab]
        if self.next_input >= self.length:
            slab = self._without_dropped(self.bridging.finish())
            for flow in self.flows:
                slab = join_slabs([flow.push(slab), flow.finish()])
            parts.append(slab)
        results = join_slabs(parts)
        self.next_result += results.length
        return results

    def _without_dropped(self, slab: Slab) -> Slab:
        drop = min(self.to_drop, slab.length)
        self.to_drop -= drop
        return cut_slab(slab, drop, slab.length) if drop else slab


def _flow(
    stage: Stage, chain: Chain, rows: int, *, number: int, emit_from: int, at_start: bool
) -> TapsFlow | Recursion:
    if isinstance(stage, RecursionStage):
        return Recursion(
            rows,
            stage.sections,
            rest=stage.rest,
            settle=stage.settle,
            rule=chain.ends,
            start=number,
        )
    return TapsFlow(stage, chain, rows, number=number, emit_from=emit_from, at_start=at_start)


def whole_stretch(chain: Chain, rows: Samples, number: int = 0) -> Slab:
    """All results of one stretch held in memory: the plain use of a stream."""
    stretch = Stretch(0, rows.shape[1], number)
    return Stream(chain, rows.shape[0], stretch, 0, rows.shape[1]).push(np.asarray(rows))
