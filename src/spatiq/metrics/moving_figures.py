"""Figures of frames whose channel moved: predictions averaged along it, what was used."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spatiq.link.description import Link
from spatiq.metrics.loss import local_loss
from spatiq.metrics.prediction import predict_ber
from spatiq.receiver.frame_batch import FrameBatch
from spatiq.receiver.moving_channel import MovingChannel

Columns = dict[str, NDArray[Any]]
_INSTANTS = 16  # of the payload at which a prediction is made


def moved_frames(batch: FrameBatch) -> Iterator[tuple[int, MovingChannel]]:
    """Index and channel of each frame in which something moved."""
    for i, moving in enumerate(batch.moving):
        if moving is not None:
            yield i, moving


def fill_motion(columns: Columns, batch: FrameBatch, link: Link) -> None:
    """How the channel was had, Doppler spread and linewidth."""
    for i, moving in moved_frames(batch):
        columns["channel_model"][i] = int(moving.following)
        if moving.bandwidth > 0:
            columns["doppler_spread_hz"][i] = moving.bandwidth * link.symbol_rate_hz
        if moving.walk > 0:
            columns["linewidth_hz"][i] = moving.walk / (2 * np.pi) * link.symbol_rate_hz


def predict_moved(
    columns: Columns, batch: FrameBatch, variance: NDArray[np.float64], link: Link
) -> None:
    """Predicted BER and implementation loss of frames whose channel moved, in place of the still
    channel's: mean over instants of the payload.

    Args:
        columns: filled for channels that stand still.
        batch: received frames, noise white.
        variance: (F, Nt); of each coefficient's error, payload power included.
        link: link description.
    """
    amplitude = float(np.sqrt(np.mean(link.layout.payload_amplitude**2)))
    for i, moving in moved_frames(batch):
        channel = moving.instants(_INSTANTS) * amplitude
        noise = np.full(len(channel), batch.noise[i])
        spread = np.tile(variance[i], (len(channel), 1))
        predicted = predict_ber(channel, noise, spread, link.codebook)
        columns["predicted_ber"][i] = np.mean(predicted.ber)
        columns["predicted_ber_spatial"][i] = np.mean(predicted.spatial)
        columns["predicted_ber_signal"][i] = np.mean(predicted.signal)
        columns["implementation_loss_db"][i] = local_loss(
            channel,
            noise,
            spread,
            link.codebook,
            np.full(len(channel), columns["bit_errors"][i]),
            np.full(len(channel), columns["bits_compared"][i]),
            predicted.ber,
            together=True,
        )[0]
