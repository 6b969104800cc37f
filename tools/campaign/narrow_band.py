"""Narrow-band noise from one direction: an interferer with a waveform that nobody knows."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.signal import lfilter

from spatiq.transmit.front_end import Context, Samples, Stage


@dataclass(frozen=True)
class NarrowBandNoise:
    """Adds first-order autoregressive noise around a frequency, one waveform on all channels.

    Unit-magnitude signature over the receive channels, phases drawn.

    Attributes:
        frequency_hz: centre.
        width_hz: between the half-power points.
        power_db: mean power, dB relative to the expected payload power of a sample at E|h|^2 = 1.
    """

    frequency_hz: float
    width_hz: float
    power_db: float

    def signature(self, context: Context) -> np.ndarray:
        """Complex128 (Nr,), unit magnitudes."""
        angles = context.generator(1 << 62).uniform(0.0, 2 * np.pi, context.receive_channels)
        return np.asarray(np.exp(1j * angles), np.complex128)

    def begin(self, context: Context) -> Stage:
        """The stage; stationary from the first sample on."""
        pole = np.exp(-np.pi * self.width_hz / context.sample_rate)
        feedback = [1.0, -pole * np.exp(2j * np.pi * self.frequency_hz / context.sample_rate)]
        size = np.sqrt(context.signal_power) * 10 ** (self.power_db / 20)
        column = (size * self.signature(context)).astype(np.complex64)[:, None]
        first_draw = context.generator((1 << 62) + 1).standard_normal(2) * np.sqrt(0.5)
        state = -np.asarray(feedback[1:]) * complex(*first_draw)

        def stage(samples: Samples, first: int) -> Samples:
            nonlocal state
            parts = context.generator(first).standard_normal((samples.shape[1], 2))
            white = (parts[:, 0] + 1j * parts[:, 1]) * np.sqrt(0.5 * (1 - pole**2))
            noise, state = lfilter([1.0], feedback, white, zi=state)
            samples += column * noise.astype(np.complex64)
            return samples

        return stage
