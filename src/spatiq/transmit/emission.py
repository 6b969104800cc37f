"""What one transmitter makes the receive channels see: frames, channel, delays; before noise."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import product

import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError
from spatiq.transmit.front_end import Samples, per_channel
from spatiq.transmit.pulse_table import PulseTable
from spatiq.transmit.shaping import FrameStream
from spatiq.transmit.truth import Truth

LARGEST_ANTENNA_DELAY = 0.5
LARGEST_RECEIVE_DELAY = 1e6


@dataclass(frozen=True, eq=False)
class Emission:
    """Streams of frames that add up to what a transmitter sends to the receive channels.

    Attributes:
        parts: (rows, stream): each adds to these receive channels. Transmit antennas that share a
            delay, and receive channels that share one, share a stream; each path of a dispersive
            channel has its own.
        receive_channels: Nr.
    """

    parts: tuple[tuple[NDArray[np.int64], FrameStream], ...]
    receive_channels: int

    def chunk(self, first: int, count: int) -> Samples:
        """Samples first..first+count-1, complex64 (Nr, count)."""
        if len(self.parts) == 1:
            return self.parts[0][1].chunk(first, count)
        out = np.zeros((self.receive_channels, count), np.complex64)
        for rows, stream in self.parts:
            out[rows] += stream.chunk(first, count)
        return out


def emission(truth: Truth, table: PulseTable) -> Emission:
    """The emission of a transmitter whose truth is given; fresh streams."""
    receive, transmit = truth.H.shape[1:]
    sent = np.zeros(transmit) if truth.antenna_delays is None else truth.antenna_delays
    taken = np.zeros(receive) if truth.receive_delays is None else truth.receive_delays
    paths: list[tuple[int | None, float]] = [(None, 0.0)]
    if truth.echoes is not None:
        paths = list(enumerate(truth.echoes.delays.tolist()))
    parts = []
    for antenna_delay, (path, late) in product(np.unique(sent), paths):
        antennas = sent == antenna_delay
        for receive_delay in np.unique(taken):
            rows = np.flatnonzero(taken == receive_delay)
            moved = float(antenna_delay) + late
            stream = _stream(truth, table, antennas, moved, rows, receive_delay, path)
            parts.append((rows, stream))
    return Emission(tuple(parts), receive)


def _stream(
    truth: Truth,
    table: PulseTable,
    antennas: NDArray[np.bool_],
    antenna_delay: float,
    rows: NDArray[np.int64],
    receive_delay: float,
    path: int | None,
) -> FrameStream:
    """What some antennas send to some receive channels, over one path of a dispersive channel."""
    chosen = None if antennas.all() else antennas

    def symbols(first: int, stop: int) -> NDArray[np.complex64]:
        received = truth.received_symbols(first, stop, chosen, path)
        return received[..., rows].astype(np.complex64)

    # An antenna's delay moves its pulses under a carrier that runs on; a receive channel's delay
    # moves pulses and carrier together.
    moved = antenna_delay * truth.samples_per_symbol
    steps = 2 * np.pi * truth.cfo_hz / truth.sample_rate
    return FrameStream(
        table=table,
        starts=truth.starts + (moved + receive_delay),
        periods=truth.link.layout.length,
        depth=len(rows),
        symbols=symbols,
        steps=steps,
        angles=truth.phase + steps * moved if moved else truth.phase,
    )


def checked_antenna_delays(
    delays: Sequence[float] | None, antennas: int
) -> NDArray[np.float64] | None:
    """Delays of the transmit antennas, nominal symbol periods, float64 (Nt,).

    Raises:
        InputError: not one for each antenna, or beyond half a symbol period.
    """
    if delays is None:
        return None
    given = np.asarray(delays, np.float64)
    limit = LARGEST_ANTENNA_DELAY
    if given.shape != (antennas,) or not np.all(np.abs(given) <= limit):
        expected = f"{antennas} numbers of symbol periods, -{limit:g} to {limit:g}"
        raise InputError("antenna delays", "", delays, expected)
    return given


def checked_receive_delays(
    delays: Sequence[float] | None, receive_channels: int
) -> NDArray[np.float64] | None:
    """Delays of the receive channels, samples (any fraction), float64 (Nr,).

    Raises:
        InputError: not one, or one for each receive channel, or beyond a million samples.
    """
    if delays is None:
        return None
    given = per_channel(delays, receive_channels, "receive delays", "").real
    if np.any(np.abs(given) > LARGEST_RECEIVE_DELAY):
        expected = f"at most {LARGEST_RECEIVE_DELAY:g} samples either way"
        raise InputError("receive delays", "", delays, expected)
    return np.asarray(given, np.float64)
