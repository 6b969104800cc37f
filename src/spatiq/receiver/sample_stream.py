"""Samples of one contiguous segment, read forward once, kept only as long as they are needed."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from spatiq.kernels import C64, F32, kernel
from spatiq.receiver.spoiled_samples import SpoiledSamples


class SampleBlock(Protocol):
    """What a block of samples must offer: complex64 samples of shape (Nr, n)."""

    @property
    def samples(self) -> NDArray[np.complex64]:
        """Samples, receive channels first."""
        ...


@kernel
def to_planes(samples: C64, planes: F32, at: int) -> int:
    """complex64 (Nr, n) -> float32 planes (Nr, 2, capacity) from column `at`.

    Returns:
        Number of samples that are not finite, in all channels; they are entered as zero.
    """
    spoiled = 0
    zero = np.float32(0.0)
    for r in range(samples.shape[0]):
        for i in range(samples.shape[1]):
            re, im = samples[r, i].real, samples[r, i].imag
            finite = np.isfinite(re) and np.isfinite(im)
            planes[r, 0, at + i] = re if finite else zero
            planes[r, 1, at + i] = im if finite else zero
            spoiled += 0 if finite else 1
    return spoiled


class SampleStream:
    """A forward-moving window over the samples of a segment.

    Real and imaginary parts are held in planes of their own, because the matched filter's inner
    loops then vectorise. Positions are per-channel file indices. Samples outside the segment read
    as zero, and so do samples that are not finite in any channel, which are entered in `spoiled`.
    Memory: what lies between `release` and the furthest position asked for, plus a block. `on_read`
    is told after each block how far it has been read. Blocks begin at `begin`, the segment's start
    unless given.
    """

    def __init__(
        self,
        blocks: Iterator[SampleBlock],
        start: int,
        stop: int,
        channels: int,
        spoiled: SpoiledSamples | None = None,
        on_read: Callable[[int], None] | None = None,
        begin: int | None = None,
    ) -> None:
        self._spoiled = spoiled
        self._on_read = on_read
        self.start = start
        self.stop = stop
        self.channels = channels
        self._blocks = blocks
        self._kept_from = start if begin is None else begin
        self._read_to = self._kept_from
        self._planes = np.zeros((channels, 2, 1 << 16), np.float32)

    def planes(self, first: int, last: int) -> NDArray[np.float32]:
        """Samples first..last-1 as float32 (Nr, 2, last-first). Valid until the next call.

        Raises:
            ValueError: when `first` has been released already.
        """
        if max(first, self.start) < self._kept_from:
            raise ValueError(f"samples before {self._kept_from} have been released, asked {first}")
        inside_first, inside_last = max(first, self.start), min(last, self.stop)
        while self._read_to < inside_last:
            self._read_block()
        if first >= self.start and last <= self.stop:
            offset = first - self._kept_from
            return self._planes[:, :, offset : offset + (last - first)]
        padded = np.zeros((self.channels, 2, last - first), np.float32)
        if inside_last > inside_first:
            offset = inside_first - self._kept_from
            count = inside_last - inside_first
            at = inside_first - first
            padded[:, :, at : at + count] = self._planes[:, :, offset : offset + count]
        return padded

    def release(self, before: int) -> None:
        """Samples before this position are no longer needed."""
        before = min(max(before, self._kept_from), self._read_to)
        dead = before - self._kept_from
        # Moving rarely keeps its cost below one copy a sample.
        if dead > self._planes.shape[2] // 2:
            kept = self._read_to - before
            self._planes[:, :, :kept] = self._planes[:, :, dead : dead + kept].copy()
            self._kept_from = before

    def pass_over(self, before: int) -> None:
        """Read on to a position without keeping what lies before it; spoiled samples are noted."""
        while self._read_to < min(before, self.stop):
            self._read_block()
            self.release(before)

    def _read_block(self) -> None:
        samples = next(self._blocks).samples
        at = self._read_to - self._kept_from
        needed = at + samples.shape[1]
        if needed > self._planes.shape[2]:
            grown = np.zeros((self.channels, 2, max(needed, 2 * self._planes.shape[2])), np.float32)
            grown[:, :, :at] = self._planes[:, :, :at]
            self._planes = grown
        if to_planes(samples, self._planes, at) and self._spoiled is not None:
            where = np.flatnonzero(~np.isfinite(samples).all(axis=0))
            self._spoiled.add(self._read_to + where)
        self._read_to += samples.shape[1]
        if self._on_read is not None:
            self._on_read(self._read_to)
