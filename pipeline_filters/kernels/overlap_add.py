"""Linear convolution of endless rows with taps: by overlap-add, or summed directly.

Overlap-add (Stockham 1966; Helms 1967): the input is cut into blocks of B samples on a
grid fixed in the numbering of samples; each block is convolved with the P taps by DFTs of
length N >= B + P - 1, so that nothing wraps round, and the blocks' results are added where
they overlap, in ascending order of blocks. One transform length, one fixed expression, and
only full blocks (or a stretch's own end): the bits of a result do not depend on how the
input was cut into slabs.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from pipeline_filters.kernels.slab import Comparable, Samples

# Samples in one pair of transforms: large enough to hide the cost of a call, small enough
# for the workspace to stay in the processor's cache.
BATCH_SAMPLES = 98_304
# Transforms run side by side in the lanes of a vector register of 16 bytes where there are as
# many, and those left over one by one, which takes twice as long each.
LANE_BYTES = 16

# A copy that turns time-major rows channel-major runs in strips of this many samples a
# row, so that what it reads is still in cache when the next row needs it.
_STRIP = 1024


def copy_rows(target: Samples, source: Samples) -> None:
    """Copies rows of samples, in strips where one of the two is not channel-major."""
    count = source.shape[1]
    straight = source.strides[1] == source.itemsize and target.strides[1] == target.itemsize
    if straight or source.shape[0] == 1 or count <= _STRIP:
        target[...] = source
        return
    for start in range(0, count, _STRIP):
        target[:, start : start + _STRIP] = source[:, start : start + _STRIP]


class OverlapAdd(Comparable):
    """Full convolution of rows with taps, on a grid of blocks.

    Positions count samples by the clock. Input starts at ``start``; before it all is zero.
    Output position m is sum over k of taps[k] * input[m - k]; positions from ``emit_from``
    to the end of the input are given, each as soon as the block that holds it is full.

    Args:
        taps: shape (P,), float64.
        hop: B, samples in a block; blocks start at multiples of B.
        transform: N, the DFT length, at least B + P - 1.
        dtype: working precision, float64 or float32.
    """

    def __init__(
        self,
        rows: int,
        taps: NDArray[np.float64],
        *,
        hop: int,
        transform: int,
        start: int,
        emit_from: int,
        dtype: np.dtype[Any],
    ) -> None:
        if transform < hop + taps.size - 1:
            raise ValueError("the transform is too short: results would wrap round in time")
        self.rows = rows
        self.hop = hop
        self.transform = transform
        self.overlap = taps.size - 1
        self.dtype = np.dtype(dtype)
        padded = np.zeros(transform)
        padded[: taps.size] = taps
        spectrum = scipy.fft.rfft(padded)
        self.spectrum = spectrum.astype(
            np.complex64 if self.dtype.itemsize == 4 else spectrum.dtype
        )
        self.filled = start % hop
        self.block_start = start - self.filled
        self.emit_from = emit_from
        self.block: Samples = np.zeros((rows, hop if self.filled else 0), self.dtype)
        self.overhang: Samples = np.zeros((rows, self.overlap), self.dtype)

    def push(self, rows: Samples) -> Samples:
        """Takes rows of shape (rows, n), all finite; gives the positions now complete."""
        count = rows.shape[1]
        parts: list[Samples] = []
        used = 0
        if self.filled or count < self.hop:
            used = min(self.hop - self.filled, count)
            if self.block.shape[1] < self.hop:
                self.block = np.zeros((self.rows, self.hop), self.dtype)
            copy_rows(self.block[:, self.filled : self.filled + used], rows[:, :used])
            self.filled += used
            if self.filled == self.hop:
                parts.append(self._convolve(self.block, 1))
                self.filled = 0
        whole = (count - used) // self.hop
        if whole:
            stop = used + whole * self.hop
            parts.append(self._convolve(rows[:, used:stop], whole))
            used = stop
        if used < count:
            if self.block.shape[1] < self.hop:
                self.block = np.zeros((self.rows, self.hop), self.dtype)
            self.filled = count - used
            copy_rows(self.block[:, : self.filled], rows[:, used:])
        return self._joined(parts)

    def finish(self) -> Samples:
        """The input has ended: the positions up to its end."""
        if not self.filled:
            return np.zeros((self.rows, 0), self.dtype)
        self.block[:, self.filled :] = 0
        unused = self.hop - self.filled
        self.filled = 0
        out = self._joined([self._convolve(self.block, 1)])
        return out[:, : max(0, out.shape[1] - unused)]

    def _joined(self, parts: list[Samples]) -> Samples:
        """The parts as one run of positions, without those before ``emit_from``."""
        if not parts:
            return np.zeros((self.rows, 0), self.dtype)
        out = parts[0] if len(parts) == 1 else np.concatenate(parts, axis=1)
        out = out[:, max(0, out.shape[1] - max(0, self.block_start - self.emit_from)) :]
        self.emit_from += out.shape[1]
        return out

    def _convolve(self, rows: Samples, blocks: int) -> Samples:
        """``blocks`` full blocks, laid end to end in ``rows``; their completed positions."""
        hop, size = self.hop, self.transform
        out = np.empty((self.rows, blocks * hop), self.dtype)
        lanes = LANE_BYTES // self.dtype.itemsize
        together = max(1, BATCH_SAMPLES // size // lanes) * lanes
        many = min(blocks, together)
        high = -(-together // many)
        # Rows that lie a power of two apart would share the cache's few lines for them.
        work = np.zeros((min(high, self.rows), many, size + 16), self.dtype)[..., :size]
        for top in range(0, self.rows, high):
            group = slice(top, min(top + high, self.rows))
            count = group.stop - group.start
            for first in range(0, blocks, many):
                run = min(many, blocks - first)
                span = slice(first * hop, (first + run) * hop)
                part = work[:count, :run]
                for index in range(run):
                    low = (first + index) * hop
                    copy_rows(part[:, index, :hop], rows[group, low : low + hop])
                spectra = scipy.fft.rfft(part, axis=-1)
                np.multiply(spectra, self.spectrum, out=spectra)
                results = scipy.fft.irfft(spectra, n=size, axis=-1, overwrite_x=True)
                target = out[group, span].reshape(count, run, hop)
                self._add(target, results, self.overhang[group])
        self.block_start += blocks * hop
        return out

    def _add(self, target: Samples, results: Samples, overhang: Samples) -> None:
        """Adds the blocks' results where they overlap, earlier blocks first."""
        hop, overlap = self.hop, self.overlap
        run = target.shape[1]
        if overlap <= hop:
            target[...] = results[:, :, :hop]
            target[:, 0, :overlap] += overhang
            target[:, 1:, :overlap] += results[:, :-1, hop : hop + overlap]
            overhang[...] = results[:, -1, hop : hop + overlap]
            return
        for index in range(run):
            target[:, index] = overhang[:, :hop] + results[:, index, :hop]
            overhang[:, : overlap - hop] = overhang[:, hop:]
            overhang[:, overlap - hop :] = 0
            overhang += results[:, index, hop : hop + overlap]


class DirectSum(Comparable):
    """The same convolution summed directly, taps in ascending order (hop of 1 sample)."""

    def __init__(
        self,
        rows: int,
        taps: NDArray[np.float64],
        *,
        start: int,
        emit_from: int,
        dtype: np.dtype[Any],
    ) -> None:
        self.taps = taps.astype(dtype)
        self.position = start
        self.emit_from = emit_from
        self.history: Samples = np.zeros((rows, taps.size - 1), dtype)

    def push(self, rows: Samples) -> Samples:
        """Takes rows of shape (rows, n), all finite; gives their n positions."""
        past = self.history.shape[1]
        count = rows.shape[1]
        known = np.concatenate([self.history, rows.astype(self.taps.dtype)], axis=1)
        out = self.taps[0] * known[:, past:]
        term = np.empty_like(out)
        for k in range(1, self.taps.size):
            np.multiply(self.taps[k], known[:, past - k : past - k + count], out=term)
            out += term
        self.history = np.array(known[:, count:])
        skip = min(count, max(0, self.emit_from - self.position))
        self.position += count
        given: Samples = out[:, skip:]
        return given

    def finish(self) -> Samples:
        """Nothing is held back."""
        return np.zeros((self.history.shape[0], 0), self.taps.dtype)
