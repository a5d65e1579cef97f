"""Linear convolution of endless rows with taps: by overlap-add, or summed directly.

Overlap-add (Stockham 1966; Helms 1967): the input is cut into blocks of B samples on a
grid fixed in the numbering of samples; each block is convolved with the P taps by DFTs of
length N >= B + P - 1, so that nothing wraps round, and the blocks' results are added where
they overlap, in ascending order of blocks. One transform length, one fixed expression, and
only full blocks (or a stretch's own end): the bits of a result do not depend on how the
input was cut into slabs.
"""

from __future__ import annotations

import threading
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pipeline_filters.kernels.slab import Comparable, Samples

# Bytes of samples in one pair of transforms: large enough to hide the cost of a call, small
# enough for samples and spectra to stay in the processor's cache.
BATCH_BYTES = 1 << 20

# Bytes of a time-major run turned channel-major at a time: half of a usual first-level cache,
# so that a line read for one row is still there for the next.
_STRIP_BYTES = 1 << 15

# Rows that lie a multiple of this apart fall into the same few sets of a first-level cache,
# which makes reading them side by side two to three times slower.
_ALIAS_BYTES = 1024

Spectra = NDArray[np.complexfloating[Any, Any]]


def is_channel_major(rows: Samples) -> bool:
    """Whether the samples of a row lie side by side."""
    return rows.shape[0] == 1 or rows.shape[1] < 2 or rows.strides[1] == rows.itemsize


def copy_rows(target: Samples, source: Samples) -> None:
    """Copies rows of samples; in strips where a time-major source turns channel-major."""
    # NumPy walks in the target's order: into a time-major target it reads all rows side by
    # side, which the cache keeps up with; only the other direction jumps in what it reads.
    if is_channel_major(source) or not is_channel_major(target):
        target[...] = source
        return
    width = max(64, _STRIP_BYTES // abs(source.strides[1] or 1))
    for start in range(0, source.shape[1], width):
        target[:, start : start + width] = source[:, start : start + width]


class _Workspace(threading.local):
    """Memory for transforms: one a thread, so that kernels need not carry it.

    Fresh arrays of this size may cost half as much as their transforms, where the C library
    gives freed memory back to the system and every page of the next is mapped anew. What a
    push returns is never part of it.
    """

    def __init__(self) -> None:
        self.room = np.empty(0, np.uint8)

    def arrays(self, rows: int, size: int, dtype: np.dtype[Any]) -> tuple[Samples, Spectra]:
        """Arrays for samples (rows, size) and their spectra, holding anything."""
        samples = rows * size * dtype.itemsize
        spectra = rows * (size // 2 + 1) * 2 * dtype.itemsize
        aligned = -(-samples // 64) * 64
        if self.room.size < aligned + spectra:
            self.room = np.empty(aligned + spectra, np.uint8)
        part = self.room[aligned : aligned + spectra].view(_complex_of(dtype))
        return self.room[:samples].view(dtype).reshape(rows, size), part.reshape(rows, -1)


_WORKSPACE = _Workspace()


def _complex_of(dtype: np.dtype[Any]) -> np.dtype[Any]:
    return np.dtype(np.complex64 if dtype.itemsize == 4 else np.complex128)


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
        # The forward transform divides by N (see `_filter`), which the taps' spectrum makes good.
        self.spectrum: Spectra = (np.fft.rfft(padded) * transform).astype(_complex_of(self.dtype))
        # How many rows the FFT takes through a transform at once, one in each lane of a
        # 16-byte register; a row left over costs more than half of what all lanes cost.
        self.lanes = 16 // self.dtype.itemsize
        self.filled = start % hop
        self.block_start = start - self.filled
        self.emit_from = emit_from
        self.block: Samples = np.zeros((rows, hop if self.filled else 0), self.dtype)
        self.overhang: Samples = np.zeros((rows, self.overlap), self.dtype)

    def push(self, rows: Samples) -> Samples:
        """Takes rows of shape (rows, n), all finite; gives the positions now complete."""
        count = rows.shape[1]
        blocks, left = divmod(self.filled + count, self.hop)
        out = self._new_run(blocks * self.hop)
        if blocks:
            self._convolve(rows, out)
            self._hold(rows[:, count - left :], 0)
        else:
            self._hold(rows, self.filled)
        self.filled = left
        return self._published(out)

    def finish(self) -> Samples:
        """The input has ended: the positions up to its end."""
        if not self.filled:
            return np.zeros((self.rows, 0), self.dtype)
        unused = self.hop - self.filled
        out = self._new_run(self.hop)
        self._convolve(np.broadcast_to(self.dtype.type(0), (self.rows, unused)), out)
        self.filled = 0
        out = self._published(out)
        return out[:, : max(0, out.shape[1] - unused)]

    def _new_run(self, length: int) -> Samples:
        """Room for results; rows start at uneven distances, see `_ALIAS_BYTES`."""
        aliased = length * self.dtype.itemsize % _ALIAS_BYTES == 0
        pitch = length + 64 // self.dtype.itemsize if aliased else length
        return np.empty((self.rows, pitch), self.dtype)[:, :length]

    def _hold(self, rows: Samples, at: int) -> None:
        """Keeps samples of a block that is not full yet, from its sample ``at`` on."""
        count = rows.shape[1]
        if count and not self.block.shape[1]:
            self.block = np.zeros((self.rows, self.hop), self.dtype)
        copy_rows(self.block[:, at : at + count], rows)

    def _published(self, out: Samples) -> Samples:
        """The run of positions just completed, without those before ``emit_from``."""
        self.block_start += out.shape[1]
        out = out[:, max(0, out.shape[1] - max(0, self.block_start - self.emit_from)) :]
        self.emit_from += out.shape[1]
        return out

    def _convolve(self, rows: Samples, out: Samples) -> None:
        """Full blocks, the first of them begun by what is held; their completed positions."""
        hop, size, lanes = self.hop, self.transform, self.lanes
        blocks = out.shape[1] // hop
        together = max(1, BATCH_BYTES // (size * self.dtype.itemsize * lanes)) * lanes
        high = min(self.rows, together)
        many = min(blocks, together // high)
        work, spectra = _WORKSPACE.arrays(-(-high * many // lanes) * lanes, size, self.dtype)
        # What overflows is seen in the results, by whoever takes them.
        with np.errstate(over="ignore", invalid="ignore"):
            for top in range(0, self.rows, high):
                group = slice(top, min(top + high, self.rows))
                count = group.stop - group.start
                for first in range(0, blocks, many):
                    run = min(many, blocks - first)
                    used = count * run
                    part = work[:used].reshape(count, run, size)
                    self._lay(part, rows[group], group, first)
                    # Two or more rows left over go faster as a full set of lanes.
                    full = -(-used // lanes) * lanes if used % lanes > 1 else used
                    work[used:full] = 0
                    self._filter(work[:full], spectra[:full])
                    target = out[group, first * hop : (first + run) * hop]
                    self._add(target.reshape(count, run, hop), part, self.overhang[group])

    def _lay(self, part: Samples, rows: Samples, group: slice, first: int) -> None:
        """Lays blocks ``first`` and on of a group of rows into the workspace."""
        hop, run = self.hop, part.shape[1]
        part[:, :, hop:] = 0
        straight = is_channel_major(rows) or hop * abs(rows.strides[1]) <= _STRIP_BYTES
        start = first * hop - self.filled
        if start < 0:
            part[:, 0, : self.filled] = self.block[group, : self.filled]
            copy_rows(part[:, 0, self.filled : hop], rows[:, : start + hop])
            part, run, start = part[:, 1:], run - 1, start + hop
        fresh = rows[:, start : start + run * hop].reshape(rows.shape[0], run, hop)
        if straight:
            part[:, :, :hop] = fresh
            return
        for index in range(run):
            copy_rows(part[:, index, :hop], fresh[:, index])

    def _filter(self, work: Samples, spectra: Spectra) -> None:
        """Convolves padded blocks with the taps, in place."""
        # numpy.fft, not scipy.fft, because it writes where it is told to (in any precision,
        # which its types deny). Both ways divide by N, for speed: without a factor of the
        # array's own type NumPy takes float32 through double precision.
        np.fft.rfft(work, norm="forward", out=spectra)  # type: ignore[arg-type]
        np.multiply(spectra, self.spectrum, out=spectra)
        np.fft.irfft(spectra, n=self.transform, out=work)  # type: ignore[arg-type]

    def _add(self, target: Samples, results: Samples, overhang: Samples) -> None:
        """Adds the blocks' results where they overlap, earlier blocks first."""
        hop, overlap = self.hop, self.overlap
        if overlap <= hop:
            target[:, :, overlap:] = results[:, :, overlap:hop]
            np.add(overhang, results[:, 0, :overlap], out=target[:, 0, :overlap])
            np.add(
                results[:, :-1, hop : hop + overlap],
                results[:, 1:, :overlap],
                out=target[:, 1:, :overlap],
            )
            overhang[...] = results[:, -1, hop : hop + overlap]
            return
        for index in range(target.shape[1]):
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
