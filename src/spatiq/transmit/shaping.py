"""Symbols to samples: frames of symbol vectors placed at any instant, made a chunk at a time."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from spatiq.kernels import kernel
from spatiq.transmit.pulse_table import PulseTable

# Samples made at a time; blocks of any size are cut from these.
CHUNK = 1 << 16
# Frames are made in groups of about this many symbol values, and kept while chunks need them.
GROUP_VALUES = 1 << 19
# The rotating phasor is set anew this often, so that rounding does not build up.
PHASOR_RESET = 256

Symbols = Callable[[int, int], NDArray[np.complex64]]


@kernel
def _add_symbols(
    scratch: NDArray[np.float32],
    offset: int,
    symbols: NDArray[np.complex64],
    start: float,
    first: int,
    last: int,
    spacing: float,
    rows: NDArray[np.float32],
    before: int,
    reach: float,
) -> None:
    """Add symbols first..last of one frame to scratch.

    Args: scratch float32 (D, 2, n), real and imaginary planes; offset int, sample index of its
    column 0; symbols complex64 (K, D); start, spacing, reach float64 in samples; rows float32
    (P + 1, taps); before int. All C-contiguous; sums in single precision, instants in double.
    """
    depth, _, n = scratch.shape
    phases = rows.shape[0] - 1
    taps = np.empty(rows.shape[1], np.float32)
    for k in range(first, last + 1):
        instant = start + k * spacing
        base = np.floor(instant)
        fraction = instant - base
        position = fraction * phases
        row = min(int(position), phases - 1)
        weight = np.float32(position - row)
        shift = int(base) - before - offset
        low = max(int(np.ceil(fraction - reach)) + before, -shift, 0)
        high = min(int(np.floor(fraction + reach)) + before, n - 1 - shift, rows.shape[1] - 1)
        if low > high:
            continue
        count = high + 1 - low
        here = rows[row, low : high + 1]
        following = rows[row + 1, low : high + 1]
        for m in range(count):
            taps[m] = here[m] + weight * (following[m] - here[m])
        for d in range(depth):
            real = symbols[k, d].real
            imag = symbols[k, d].imag
            if real == 0 and imag == 0:
                continue
            in_phase = scratch[d, 0, shift + low : shift + high + 1]
            quadrature = scratch[d, 1, shift + low : shift + high + 1]
            for m in range(count):
                in_phase[m] += real * taps[m]
                quadrature[m] += imag * taps[m]


@kernel
def _add_rotated(
    out: NDArray[np.complex64],
    scratch: NDArray[np.float32],
    low: int,
    high: int,
    angle: float,
    step: float,
) -> None:
    """Add columns low..high-1 of scratch, rotated, to out.

    Args: out complex64 (D, n); scratch float32 (D, 2, n); angle float64, radians at column low;
    step float64, radians per column.
    """
    depth = out.shape[0]
    if angle == 0.0 and step == 0.0:
        for d in range(depth):
            for i in range(low, high):
                out[d, i] += np.complex64(complex(scratch[d, 0, i], scratch[d, 1, i]))
        return
    turn = complex(np.cos(step), np.sin(step))
    phasor = 1.0 + 0.0j
    for i in range(low, high):
        if (i - low) % PHASOR_RESET == 0:
            now = angle + step * (i - low)
            phasor = complex(np.cos(now), np.sin(now))
        cosine = np.float32(phasor.real)
        sine = np.float32(phasor.imag)
        for d in range(depth):
            real = scratch[d, 0, i]
            imag = scratch[d, 1, i]
            out[d, i] += np.complex64(
                complex(real * cosine - imag * sine, real * sine + imag * cosine)
            )
        phasor *= turn


@kernel
def add_frames(
    out: NDArray[np.complex64],
    offset: int,
    symbols: NDArray[np.complex64],
    starts: NDArray[np.float64],
    spacing: float,
    rows: NDArray[np.float32],
    before: int,
    reach: float,
    steps: NDArray[np.float64],
    angles: NDArray[np.float64],
    scratch: NDArray[np.float32],
) -> None:
    """Add frames of symbols, pulse-shaped and turned by their carriers, to a chunk of samples.

    Args:
        out: complex64 (D, n), C-contiguous; the chunk, added to.
        offset: int64; sample index of the chunk's first column.
        symbols: complex64 (F, K, D), C-contiguous.
        starts: float64 (F,); instant of each frame's first symbol, samples.
        spacing: float64; samples per symbol period.
        rows, before, reach: of the `PulseTable`.
        steps: float64 (F,); carrier offset of each frame, radians per sample.
        angles: float64 (F,); carrier phase at each frame's start, radians.
        scratch: float32 (D, 2, n), C-contiguous; overwritten.
    """
    frames, periods, depth = symbols.shape
    n = out.shape[1]
    for f in range(frames):
        # One symbol more at either end than the division says: rounding must not lose one.
        first = max(0, int(np.floor((offset - reach - starts[f]) / spacing)) - 1)
        last = min(periods - 1, int(np.ceil((offset + n + reach - starts[f]) / spacing)) + 1)
        if first > last:
            continue
        begin = starts[f] + first * spacing - reach - offset
        end = starts[f] + last * spacing + reach - offset
        low = int(max(0.0, np.floor(begin)))
        high = int(min(float(n), np.ceil(end) + 1))
        if low >= high:
            continue
        for d in range(depth):
            for i in range(low, high):
                scratch[d, 0, i] = 0
                scratch[d, 1, i] = 0
        _add_symbols(
            scratch, offset, symbols[f], starts[f], first, last, spacing, rows, before, reach
        )
        angle = 0.0
        if angles[f] != 0.0 or steps[f] != 0.0:
            angle = angles[f] + steps[f] * (offset + low - starts[f])
        _add_rotated(out, scratch, low, high, angle, steps[f])


@dataclass(frozen=True, eq=False)
class FrameStream:
    """Samples of many frames, made chunk by chunk in memory that does not grow with their number.

    Attributes:
        table: the sampled pulse.
        starts: float64 (F,), ascending; instant of each frame's first symbol, samples.
        periods: symbol periods per frame, K.
        depth: D, values per symbol period (transmit antennas or receive channels).
        symbols: function of (first, stop) -> complex64 (stop - first, K, D), those frames' symbols.
        steps: float64 (F,); carrier offset, radians per sample.
        angles: float64 (F,); carrier phase at the frame's start, radians.
    """

    table: PulseTable
    starts: NDArray[np.float64]
    periods: int
    depth: int
    symbols: Symbols
    steps: NDArray[np.float64]
    angles: NDArray[np.float64]
    _groups: dict[int, NDArray[np.complex64]] = field(default_factory=dict)

    @property
    def group_frames(self) -> int:
        """Frames that are made at a time."""
        return max(1, GROUP_VALUES // (self.periods * self.depth))

    def _group(self, index: int) -> NDArray[np.complex64]:
        """Symbols of one group; the last two used are kept."""
        if index not in self._groups:
            while len(self._groups) > 1:
                del self._groups[min(self._groups)]
            first = index * self.group_frames
            stop = min(first + self.group_frames, len(self.starts))
            made = self.symbols(first, stop)
            self._groups[index] = np.ascontiguousarray(made, np.complex64)
        return self._groups[index]

    def chunk(self, first: int, count: int) -> NDArray[np.complex64]:
        """Samples first..first+count-1, complex64 (D, count)."""
        out = np.zeros((self.depth, count), np.complex64)
        table = self.table
        length = (self.periods - 1) * table.spacing + table.reach
        begin = int(np.searchsorted(self.starts, first - length, "left"))
        end = int(np.searchsorted(self.starts, first + count + table.reach, "right"))
        if begin >= end:
            return out
        scratch = np.empty((self.depth, 2, count), np.float32)
        size = self.group_frames
        for index in range(begin // size, (end - 1) // size + 1):
            low, high = max(begin, index * size), min(end, (index + 1) * size)
            add_frames(
                out,
                first,
                self._group(index)[low - index * size : high - index * size],
                self.starts[low:high],
                table.spacing,
                table.rows,
                table.before,
                table.reach,
                self.steps[low:high],
                self.angles[low:high],
                scratch,
            )
        return out


def chunks(stream: FrameStream, n_samples: int) -> Iterator[NDArray[np.complex64]]:
    """All samples of a stream, always cut at the same places."""
    for first in range(0, n_samples, CHUNK):
        yield stream.chunk(first, min(CHUNK, n_samples - first))


def reblock(
    pieces: Iterator[NDArray[np.complex64]], block_size: int
) -> Iterator[NDArray[np.complex64]]:
    """Pieces (D, any) -> blocks (D, block_size) of the same samples, the last one shorter."""
    held: list[NDArray[np.complex64]] = []
    count = 0
    for piece in pieces:
        held.append(piece)
        count += piece.shape[1]
        if count < block_size:
            continue
        joined = np.concatenate(held, axis=1) if len(held) > 1 else piece
        whole = count - count % block_size
        for first in range(0, whole, block_size):
            yield np.ascontiguousarray(joined[:, first : first + block_size])
        count -= whole
        held = [joined[:, whole:]] if count else []
    if count:
        yield np.ascontiguousarray(np.concatenate(held, axis=1))
