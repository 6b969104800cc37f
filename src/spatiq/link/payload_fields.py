"""Fields of the payload: what bits each contributes to frame n, before scrambling."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from spatiq.signal.crc import Crc
from spatiq.signal.prbs import Prbs

Bits = NDArray[np.uint8]
Frames = NDArray[np.int64]


def split_value(values: Frames, width: int, msb_first: bool) -> Bits:
    """Whole numbers, shape (F,) -> their lowest `width` bits, shape (F, width)."""
    shifts = np.arange(width, dtype=np.int64)
    if msb_first:
        shifts = shifts[::-1]
    return ((values[:, None] >> shifts) & 1).astype(np.uint8)


def join_value(bits: Bits, msb_first: bool) -> Frames:
    """Bits, shape (F, width <= 62) -> whole numbers, shape (F,)."""
    ordered = bits if msb_first else bits[:, ::-1]
    weights = np.int64(1) << np.arange(bits.shape[1] - 1, -1, -1, dtype=np.int64)
    return np.asarray(ordered.astype(np.int64) @ weights, np.int64)


class Source(Protocol):
    """Where a field's bits come from when they follow from the frame number."""

    @property
    def frame_dependent(self) -> bool:
        """True when frames may differ."""

    def bits(self, frames: Frames, width: int) -> Bits:
        """Bits of the given frames: uint8, shape (F, width)."""


@dataclass(frozen=True)
class CounterSource:
    """(start + n) modulo 2^width."""

    start: int
    msb_first: bool
    frame_dependent: bool = True

    def bits(self, frames: Frames, width: int) -> Bits:
        """Bits of the given frames: uint8, shape (F, width)."""
        mask = np.int64((1 << width) - 1)
        return split_value((self.start + (frames & mask)) & mask, width, self.msb_first)


@dataclass(frozen=True)
class PrbsSource:
    """A pseudo-random sequence, begun anew in each frame or running on."""

    prbs: Prbs
    running: bool

    @property
    def frame_dependent(self) -> bool:
        """True when frames may differ."""
        return self.running

    def bits(self, frames: Frames, width: int) -> Bits:
        """Bits of the given frames: uint8, shape (F, width)."""
        if not self.running:
            return np.broadcast_to(self.prbs.bits(0, width), (frames.size, width))
        period = self.prbs.period
        # Factors below 2^31 and 2^24: the product fits.
        starts = (frames % period) * np.int64(width % period) % period
        return self.prbs.bits_at(starts, width)


@dataclass(frozen=True, eq=False)
class FileSource:
    """Bits of a file, taken cyclically."""

    name: str
    content: Bits
    running: bool

    @property
    def frame_dependent(self) -> bool:
        """True when frames may differ."""
        return self.running

    def bits(self, frames: Frames, width: int) -> Bits:
        """Bits of the given frames: uint8, shape (F, width)."""
        total = self.content.size
        factor = (frames if self.running else np.zeros_like(frames)) % total
        starts = factor * np.int64(width % total) % total
        return np.asarray(self.content[(starts[:, None] + np.arange(width)) % total], np.uint8)


@dataclass(frozen=True, eq=False)
class FixedSource:
    """The same bits in each frame."""

    value: Bits
    frame_dependent: bool = False

    def bits(self, frames: Frames, width: int) -> Bits:
        """Bits of the given frames: uint8, shape (F, width)."""
        return np.broadcast_to(self.value, (frames.size, width))


@dataclass(frozen=True)
class CrcSource:
    """Check bits over earlier fields.

    Attributes:
        crc: the code.
        covers: indices of the fields covered, in the order in which their bits enter.
    """

    crc: Crc
    covers: tuple[int, ...]


@dataclass(frozen=True, eq=False)
class FieldSpan:
    """One field: bits start..stop-1 of the plain payload.

    Attributes:
        type: "counter", "prbs", "file", "fixed", "data" or "crc".
        start: first bit.
        stop: one past the last bit.
        text: one line for people.
        source: what gives the bits; None for "data".
        padding: True for the zeros that fill a payload up.
    """

    type: str
    start: int
    stop: int
    text: str
    source: CounterSource | PrbsSource | FileSource | FixedSource | CrcSource | None
    padding: bool = False

    @property
    def width(self) -> int:
        """Number of bits."""
        return self.stop - self.start

    @property
    def is_running(self) -> bool:
        """True for a sequence or file that runs on from frame to frame."""
        return isinstance(self.source, PrbsSource | FileSource) and self.source.running
