"""What dispersive reception needs to know of a link: what is known of each symbol period."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError
from spatiq.link.blocks import MULTICARRIER, BlockRun, fill_blocks, take_subcarriers
from spatiq.link.description import Link
from spatiq.link.layout import Period
from spatiq.receiver.fir_channel import (
    Complex,
    Window,
    shifted_vectors,
    subcarrier_channels,
    supported_rows,
)
from spatiq.receiver.options import ReceiverOptions
from spatiq.signal.codebooks import Codebook

# Lags that are looked at: the flanks of a pulse ahead of the strongest path, and echoes behind it.
WIDEST = Window(-3, 12)
# Known vectors wanted for each unknown vector of the channel, so that N0 can be told as well.
_LEAST_ROWS = 1.25


@dataclass(frozen=True, eq=False)
class DispersivePlan:
    """A link as dispersive reception sees it.

    Attributes:
        codebook: the words.
        known: complex128 (K, Nt); known vectors, zero where payload or nothing is sent.
        is_known: bool (K,); False at payload.
        payload: int64 (Kp,); periods of the payload words.
        amplitude: float64 (K,); factor of the payload words, 0 elsewhere.
        window: the widest window that the known symbols can tell.
        rows: int64 (n,); periods whose received vector depends on known symbols alone.
        shifted: complex128 (n, L, Nt); what they depend on.
        windows: what the information criterion may choose from.
        blocks: payload sections sent in blocks.
    """

    codebook: Codebook
    known: Complex
    is_known: NDArray[np.bool_]
    payload: NDArray[np.int64]
    amplitude: NDArray[np.float64]
    window: Window
    rows: NDArray[np.int64]
    shifted: Complex
    windows: list[Window]
    blocks: tuple[BlockRun, ...]

    @property
    def centre(self) -> float:
        """Energy-weighted mean period of the known symbols behind the estimate."""
        energy = np.sum(np.abs(self.shifted) ** 2, axis=(1, 2))
        return float(np.sum(self.rows * energy) / np.sum(energy))

    def vectors(self, words: NDArray[np.int64]) -> Complex:
        """Transmit vectors (K, Nt) with payload words (Kp,); a word of -1 sends nothing."""
        out = self.known.copy()
        sent = self.codebook.vectors[np.maximum(words, 0)] * (words >= 0)[:, None]
        out[self.payload] = sent * self.amplitude[self.payload, None]
        fill_blocks(out, self.blocks)
        return out

    def at_words(self, received: Complex) -> Complex:
        """Vectors received in all periods (K, Nr), as they are at each word's place, (Kp, Nr)."""
        return take_subcarriers(received, self.blocks)[self.payload]

    def channels_of_words(self, taps: Complex, window: Window) -> Complex | None:
        """Channel at each word's subcarrier, (Kp, Nr, Nt); None unless all take subcarriers."""
        if not self.blocks or any(run.form != MULTICARRIER for run in self.blocks):
            return None
        responses = [
            np.tile(subcarrier_channels(taps, window, run.length)[run.slots], (run.count, 1, 1))
            for run in self.blocks
        ]
        return np.concatenate(responses)


def is_dispersive(link: Link, options: ReceiverOptions) -> bool:
    """Whether a link is received by the stages of dispersive channels: told so, or multicarrier."""
    return options.channel == "dispersive" or link.layout.multicarrier


def dispersive_plan(link: Link, memory: int | None) -> DispersivePlan:
    """The plan.

    Args:
        link: the link description.
        memory: earlier symbols that a received vector depends on; None: to be chosen by frame.

    Raises:
        InputError: the known symbols cannot tell a channel of such a memory.
    """
    layout = link.layout
    unknown = (Period.PAYLOAD, Period.PREFIX, Period.BODY)
    is_known = ~np.isin(layout.kind, unknown)
    amplitude = np.zeros(layout.length)
    amplitude[layout.payload_index] = layout.payload_amplitude
    used = np.any(link.codebook.vectors != 0, axis=0) | np.any(layout.known != 0, axis=0)
    window = _widest(layout.known, is_known, used, memory)
    if window is None:
        wanted = "no memory at all" if memory is None else f"a memory of {memory} symbols"
        raise InputError(
            link.path or "link description",
            "frame.section",
            f"known symbols that cannot tell a dispersive channel of {wanted}",
            "longer sync or pilot sections, with silence or known symbols around each",
        )
    rows = supported_rows(is_known, window)
    return DispersivePlan(
        codebook=link.codebook,
        known=layout.known,
        is_known=is_known,
        payload=layout.payload_index,
        amplitude=amplitude,
        window=window,
        rows=rows,
        shifted=shifted_vectors(layout.known, rows, window),
        windows=window.inside(memory),
        blocks=layout.blocks,
    )


def _widest(
    known: Complex, is_known: NDArray[np.bool_], used: NDArray[np.bool_], memory: int | None
) -> Window | None:
    """The widest window that can be estimated from known symbols; None: not even lag 0."""
    if memory is None:
        shapes = [Window(max(WIDEST.first, -last), last) for last in range(WIDEST.last, -1, -1)]
    else:
        # Every window of that memory lies inside; the search is held to as many lags ahead.
        first = max(WIDEST.first, -memory)
        shapes = [Window(low, memory) for low in range(first, 1)]
    for window in shapes:
        rows = supported_rows(is_known, window)
        unknown = int(used.sum()) * window.size
        if rows.size < _LEAST_ROWS * unknown:
            continue
        flat = shifted_vectors(known, rows, window)[:, :, used].reshape(rows.size, -1)
        values = np.linalg.svd(flat, compute_uv=False)
        if values[-1] > 0.05 * values[0]:
            return window
    return None
