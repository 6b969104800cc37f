"""Reference waveforms: the baseband to be played on each transmit antenna."""

from __future__ import annotations

from collections.abc import Callable, Iterator

import numpy as np
from numpy.typing import ArrayLike, NDArray

from spatiq.errors import InputError
from spatiq.link.description import Link
from spatiq.transmit.frames import frame_vectors
from spatiq.transmit.pulse_table import pulse_table
from spatiq.transmit.shaping import CHUNK, FrameStream, chunks, reblock


def ascending_starts(starts: ArrayLike, frames: int) -> NDArray[np.float64]:
    """Frame starts as float64 (F,). Raises InputError unless finite, ascending, one per frame."""
    values = np.asarray(starts, np.float64)
    if values.shape != (frames,):
        raise InputError("frame starts", "", f"shape {values.shape}", f"one per frame, ({frames},)")
    if not np.isfinite(values).all():
        raise InputError("frame starts", "", "a start that is not finite", "sample instants")
    if np.any(np.diff(values) < 0):
        raise InputError("frame starts", "", "a start before its predecessor", "ascending starts")
    return values


def transmit_waveform(
    link: Link,
    frame_numbers: ArrayLike,
    starts: ArrayLike,
    samples_per_symbol: float,
    *,
    data_bits: NDArray[np.uint8] | None = None,
    clock_ppm: float = 0.0,
    n_samples: int | None = None,
    block_size: int = CHUNK,
) -> Iterator[NDArray[np.complex64]]:
    """Baseband of all transmit antennas, in blocks.

    Symbol k of a frame that starts at t0 has its pulse centred on sample t0 + k * sps * (1 + ppm);
    r[n] = sum_k x_k p((n - t0 - k sps) / sps) / sqrt(sps).

    Args:
        link: the link description.
        frame_numbers: integers, shape (F,).
        starts: shape (F,), ascending; sample instant (a real number) of each frame's first symbol.
        samples_per_symbol: sample rate over symbol rate, any real number from 1 up.
        data_bits: uint8 (F, link.payload.data_bits), for payloads with "data" fields.
        clock_ppm: how much longer than nominal the symbol period is, parts per million.
        n_samples: samples to make from sample 0; None: up to the end of the last pulse.
        block_size: samples per block; the samples do not depend on it.

    Yields:
        complex64, shape (Nt, block_size); the last block may be shorter.

    Raises:
        InputError: starts that are not ascending or not one per frame, or a ratio or clock offset
            out of range.
    """
    numbers = np.asarray(frame_numbers, np.int64)
    instants = ascending_starts(starts, len(numbers))

    def data(first: int, stop: int) -> NDArray[np.uint8] | None:
        return None if data_bits is None else data_bits[first:stop]

    stream = waveform_stream(link, numbers, instants, samples_per_symbol, clock_ppm, data)
    if n_samples is None:
        n_samples = waveform_length(stream)
    return reblock(chunks(stream, n_samples), block_size)


def waveform_stream(
    link: Link,
    frame_numbers: NDArray[np.int64],
    starts: NDArray[np.float64],
    samples_per_symbol: float,
    clock_ppm: float,
    data_bits: Callable[[int, int], NDArray[np.uint8] | None],
) -> FrameStream:
    """All antennas' waveform as a stream; data_bits(first, stop) gives those frames' data bits."""

    def symbols(first: int, stop: int) -> NDArray[np.complex64]:
        vectors = frame_vectors(link, frame_numbers[first:stop], data_bits(first, stop))
        return vectors.astype(np.complex64)

    return FrameStream(
        table=pulse_table(link.pulse, samples_per_symbol, clock_ppm),
        starts=starts,
        periods=link.layout.length,
        depth=link.antennas,
        symbols=symbols,
        steps=np.zeros(len(frame_numbers)),
        angles=np.zeros(len(frame_numbers)),
    )


def waveform_length(stream: FrameStream) -> int:
    """Samples from sample 0 up to the end of the last frame's last pulse."""
    if not len(stream.starts):
        return 0
    table = stream.table
    end = stream.starts[-1] + (stream.periods - 1) * table.spacing + table.reach
    return max(0, int(np.floor(end)) + 1)
