"""The ends of a stretch: what stands before its first sample and after its last."""

from __future__ import annotations

from typing import Literal

import numpy as np
from numpy.typing import NDArray

from pipeline_filters.kernels.slab import (
    Comparable,
    Marks,
    Slab,
    cut_slab,
    empty_slab,
    join_slabs,
)

Rule = Literal["zero", "hold", "even", "odd", "blank"]


def needed_samples(rule: Rule, reach: int) -> int:
    """How many samples of the stretch an extension by ``reach`` is made from."""
    if reach == 0 or rule in ("zero", "blank"):
        return 0
    return 1 if rule == "hold" else reach + 1


def extend(slab: Slab, rule: Rule, reach: int, *, side: Literal["left", "right"]) -> Slab:
    """The ``reach`` samples beyond one end, in time order.

    ``slab`` starts (left) or ends (right) at that end and holds the whole stretch, or at
    least `needed_samples` of it. even: mirrored about the end sample, which is not
    repeated. odd: twice the end sample minus the mirror. Where the stretch is shorter
    than the reach, reflection repeats with period 2(n - 1); with one sample, even, odd
    and hold are the same. An extension of a missing sample is missing.
    """
    if side == "right":
        mirrored = Slab(slab.values[:, ::-1], _flip(slab.missing))
        beyond = extend(mirrored, rule, reach, side="left")
        return Slab(beyond.values[:, ::-1], _flip(beyond.missing))
    rows, count = slab.values.shape
    if rule in ("zero", "blank"):
        marks = np.ones((rows, reach), np.bool_) if rule == "blank" and reach else None
        return Slab(np.zeros((rows, reach), slab.values.dtype), marks)
    distance = np.arange(reach, 0, -1)
    if rule == "hold" or count == 1:
        return _pick(slab, np.zeros(reach, np.int64))
    if rule == "even":
        return _pick(slab, _reflected(distance, count))
    # In float64 whatever the slab's type, which may depend on how the input was cut.
    slab = Slab(slab.values.astype(np.float64, copy=False), slab.missing)
    near = distance[distance < count]
    part = _pick(slab, near)
    end = cut_slab(slab, 0, 1)
    once = Slab(2 * end.values - part.values, _either(part.missing, end.missing, near.size))
    if near.size == reach:
        return once
    return join_slabs([_odd_repeated(slab, distance[distance >= count]), once])


def _odd_repeated(slab: Slab, distance: NDArray[np.int64]) -> Slab:
    """Odd reflection about both ends, repeated: it climbs by 2(last - first) a period."""
    count = slab.values.shape[1]
    period = 2 * (count - 1)
    turns, rest = np.divmod(-distance, period)
    second_half = rest > count - 1
    part = _pick(slab, np.where(second_half, period - rest, rest))
    first, last = slab.values[:, :1], slab.values[:, -1:]
    base = np.where(second_half, 2 * last - part.values, part.values)
    values = base + turns * (2 * (last - first))
    missing = part.missing
    if slab.missing is not None:
        missing = _either(missing, slab.missing[:, :1] | slab.missing[:, -1:], distance.size)
    return Slab(values, missing)


def _reflected(distance: NDArray[np.int64], count: int) -> NDArray[np.int64]:
    period = 2 * (count - 1)
    rest = distance % period
    return np.where(rest > count - 1, period - rest, rest)


def _pick(slab: Slab, index: NDArray[np.int64]) -> Slab:
    return Slab(slab.values[:, index], None if slab.missing is None else slab.missing[:, index])


def _flip(missing: Marks | None) -> Marks | None:
    return None if missing is None else missing[:, ::-1]


def _either(one: Marks | None, other: Marks | None, reach: int) -> Marks | None:
    if other is None or not other.any():
        return one
    spread = np.broadcast_to(other, (other.shape[0], reach))
    return np.array(spread) if one is None else one | spread


class Extension(Comparable):
    """Passes a stretch through with both ends extended.

    Args:
        rule: the ends rule.
        before, after: samples to add at the stretch's start and end.
        at_start: false where pushing starts in mid-stretch; then nothing is added before,
            and the first sample pushed must lie far enough back for the end's extension.
    """

    def __init__(
        self, rows: int, rule: Rule, *, before: int, after: int, at_start: bool = True
    ) -> None:
        self.rule: Rule = rule
        self.after = after
        self.before = before if at_start else 0
        self.waiting = at_start
        self.head = empty_slab(rows, np.dtype(np.float64))
        self.tail = empty_slab(rows, np.dtype(np.float64))

    def push(self, slab: Slab) -> Slab:
        """Takes the next samples; gives the extended run as far as it is known."""
        if not slab.length:
            return slab
        if not self.waiting:
            self._keep_tail(slab)
            return slab
        slab = join_slabs([self.head, slab])
        if slab.length < needed_samples(self.rule, self.before):
            self.head = Slab(np.array(slab.values), slab.missing)
            return cut_slab(slab, 0, 0)
        return self._begin(slab)

    def finish(self) -> Slab:
        """The stretch has ended: the rest, with what stands beyond its end."""
        rest = cut_slab(self.head, 0, 0)
        if self.waiting:
            if not self.head.length:
                return rest
            rest = self._begin(self.head)
        if not self.after:
            return rest
        known = self.tail
        if not known.length:  # zero and blank keep nothing
            known = Slab(np.zeros((rest.values.shape[0], 1), rest.values.dtype))
        return join_slabs([rest, extend(known, self.rule, self.after, side="right")])

    def _begin(self, slab: Slab) -> Slab:
        """The stretch's first samples with what stands before them."""
        self.waiting = False
        self.head = cut_slab(self.head, 0, 0)
        self._keep_tail(slab)
        if not self.before:
            return slab
        return join_slabs([extend(slab, self.rule, self.before, side="left"), slab])

    def _keep_tail(self, slab: Slab) -> None:
        keep = needed_samples(self.rule, self.after)
        if not keep:
            return
        joined = slab if slab.length >= keep else join_slabs([self.tail, slab])
        last = cut_slab(joined, max(0, joined.length - keep), joined.length)
        self.tail = Slab(
            np.array(last.values), None if last.missing is None else last.missing.copy()
        )
