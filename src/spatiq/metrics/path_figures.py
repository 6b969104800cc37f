"""Figures of each receive channel and each antenna's path: power, noise, delay; per frame."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    from spatiq.link.description import Link
    from spatiq.receiver.frame_batch import FrameBatch

Floats = NDArray[np.float64]

# What a receive channel carried, over a whole recording.
NOTHING, NO_SIGNAL, SIGNAL = "nothing at all", "no signal", "signal"
SILENT = (NOTHING, NO_SIGNAL)

# Field of `PathFigures` -> unit, meaning; of receive channels first, of antennas then.
RECEIVE: dict[str, tuple[str, str]] = {
    "receive_power": ("", "mean over payload of |h s|^2, full scale squared"),
    "receive_noise": ("", "N0 per complex component after the matched filter"),
    "receive_excess": ("", "energy of the channel estimate over what noise alone would give"),
    "receive_delay": ("samples", "how late, against the mean of the channels that could be told"),
    "receive_delay_std": ("samples", "its standard deviation"),
}
ANTENNA: dict[str, tuple[str, str]] = {
    "antenna_delay": (
        "symbol periods",
        "how late, against the mean of the antennas that could be told",
    ),
    "antenna_delay_std": ("symbol periods", "its standard deviation"),
}


@dataclass(frozen=True, eq=False)
class PathFigures:
    """Float64 arrays, (F, Nr) or (F, Nt); NaN where a figure could not be measured.

    Attributes: as in `RECEIVE` and `ANTENNA`; sample_rate in Hz.
    """

    receive_power: Floats
    receive_noise: Floats
    receive_excess: Floats
    receive_delay: Floats
    receive_delay_std: Floats
    antenna_delay: Floats
    antenna_delay_std: Floats
    sample_rate: float


def path_figures(
    batch: FrameBatch, seen: FrameBatch, link: Link, sample_rate: float
) -> PathFigures:
    """Figures of a batch.

    Args:
        batch: received frames, as detected (whitened where the noise is not white).
        seen: the same at the receive antennas.
        link: the link description.
        sample_rate: Hz.
    """
    vectors = link.codebook.vectors
    moments = vectors.T @ vectors.conj() / len(vectors)
    noise = channel_noise(batch)
    used = batch.antenna_energy > 0
    inverse = np.where(used, 1.0 / np.where(used, batch.antenna_energy, 1.0), 0.0)
    # The estimate's own error adds N0 |x_a|^2 / energy behind it to |h x|^2.
    error = noise * (inverse @ np.diag(moments).real)[:, None]
    total = np.einsum("fra,ab,frb->fr", seen.channel, moments, seen.channel.conj()).real
    power = float(np.mean(link.layout.payload_amplitude**2)) * np.maximum(total - error, 0.0)
    energy = np.einsum("fra,fa->fr", np.abs(seen.channel) ** 2, batch.antenna_energy)
    alone = noise * used.sum(axis=1, keepdims=True)
    some = alone > 0
    excess = np.where(some, energy / np.where(some, alone, 1.0), np.nan)
    return PathFigures(
        receive_power=power,
        receive_noise=noise,
        receive_excess=excess,
        receive_delay=batch.receive_delay.copy(),
        receive_delay_std=np.sqrt(batch.receive_delay_var),
        antenna_delay=batch.antenna_delay.copy(),
        antenna_delay_std=np.sqrt(batch.antenna_delay_var),
        sample_rate=sample_rate,
    )


def channel_noise(batch: FrameBatch) -> Floats:
    """N0 of each receive channel at the antennas, (F, Nr): whitening undone."""
    noise = np.einsum("frr->fr", batch.residual).real.copy()
    for i in np.flatnonzero(batch.coloured):
        back = np.linalg.pinv(batch.whitener[i])
        noise[i] = np.einsum("rp,pq,rq->r", back, batch.residual[i], back.conj()).real
    return np.asarray(noise, np.float64)
