"""Received symbols for a genie: matched filter at the true instants, true carrier taken out."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError
from spatiq.kernels import kernel
from spatiq.transmit.pulse_table import pulse_table
from spatiq.transmit.truth import Truth


@kernel
def matched_symbols(
    samples: NDArray[np.complex64],
    symbols: NDArray[np.complex128],
    start: float,
    spacing: float,
    rows: NDArray[np.float32],
    before: int,
    reach: float,
    step: float,
    angle: float,
) -> None:
    """Matched-filter one frame; sums in double precision.

    Args: samples complex64 (Nr, n), C-contiguous; symbols complex128 (K, Nr), overwritten; start
    and spacing in samples; rows float32 (P + 1, taps), before, reach of the `PulseTable`; step in
    radians per sample, angle radians at the start. Samples outside 0..n-1 count as zero.
    """
    channels, n = samples.shape
    phases = rows.shape[0] - 1
    for k in range(symbols.shape[0]):
        instant = start + k * spacing
        base = np.floor(instant)
        fraction = instant - base
        position = fraction * phases
        row = min(int(position), phases - 1)
        weight = position - row
        shift = int(base) - before
        low = max(int(np.ceil(fraction - reach)) + before, -shift, 0)
        high = min(int(np.floor(fraction + reach)) + before, n - 1 - shift, rows.shape[1] - 1)
        for r in range(channels):
            symbols[k, r] = 0.0
        for m in range(low, high + 1):
            tap = rows[row, m] + weight * (rows[row + 1, m] - rows[row, m])
            turn = angle + step * (shift + m - start)
            phasor = complex(tap * np.cos(turn), -tap * np.sin(turn))
            for r in range(channels):
                symbols[k, r] += samples[r, shift + m] * phasor


def genie_symbols(
    truth: Truth,
    samples: NDArray[np.complex64],
    first: int = 0,
    stop: int | None = None,
    delay: float = 0.0,
) -> NDArray[np.complex128]:
    """Noisy received symbols at perfect timing, carrier and clock.

    Receive delays, drift and phase noise are taken out, too; gain steps and impairments of the
    front end are not. With antennas of different delays there is no one right instant: ask for each
    antenna's.

    Args:
        truth: the truth of the recording.
        samples: complex64 (Nr, n), the whole recording from sample 0; lost samples as zeros
            (`spatiq.transmit.losses.spread`).
        first: first frame.
        stop: frame after the last one; None: all.
        delay: symbols are sampled so many nominal symbol periods late.

    Returns:
        complex128, shape (F, K, Nr): H x + noise of variance N0 (+ intersymbol interference of the
        pulse).

    Raises:
        InputError: samples that are not (Nr, n).
    """
    channels = truth.H.shape[1]
    if samples.ndim != 2 or samples.shape[0] != channels:
        raise InputError("samples", "", f"shape {samples.shape}", f"({channels}, n)")
    stop = truth.frames if stop is None else min(stop, truth.frames)
    table = pulse_table(truth.link.pulse, truth.samples_per_symbol, truth.clock_ppm)
    samples = np.ascontiguousarray(samples, np.complex64)
    if truth.rotations:
        phases = np.concatenate(list(truth.common_phase(samples.shape[1])))
        samples = samples * np.exp(-1j * phases).astype(np.complex64)
    symbols = np.zeros((max(0, stop - first), truth.link.layout.length, channels), np.complex128)
    delays = np.zeros(channels) if truth.receive_delays is None else truth.receive_delays
    moved = delay * truth.samples_per_symbol
    for receive_delay in np.unique(delays):
        rows = np.flatnonzero(delays == receive_delay)
        heard = samples if len(rows) == channels else samples[rows]
        part = np.zeros((symbols.shape[1], len(rows)), np.complex128)
        for i, f in enumerate(range(first, stop)):
            step = float(2 * np.pi * truth.cfo_hz[f] / truth.sample_rate)
            matched_symbols(
                heard,
                part,
                float(truth.starts[f]) + receive_delay + moved,
                table.spacing,
                table.rows,
                table.before,
                table.reach,
                step,
                float(truth.phase[f]) + step * moved,
            )
            symbols[i][:, rows] = part
    return symbols
