"""A narrow-band interferer: a steady tone with its own signature over the receive channels."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from spatiq.errors import InputError
from spatiq.transmit.front_end import Context, Samples, Stage


@dataclass(frozen=True, eq=False)
class Interferer:
    """Adds sqrt(power) a_r exp(j 2 pi f n / sample rate) to receive channel r.

    Attributes:
        frequency_hz: f, within half the sample rate either way.
        power_db: mean power over the receive channels, dB relative to the expected payload power of
            a sample at E|h|^2 = 1.
        signature: a, complex, one for each receive channel, scaled to unit mean power; None: drawn,
            unit magnitudes and phases uniform and independent.
    """

    frequency_hz: float
    power_db: float
    signature: ArrayLike | None = None

    def begin(self, context: Context) -> Stage:
        """The stage; raises InputError for values out of range."""
        column = self.amplitudes(context)[:, None]
        per_sample = self.frequency_hz / context.sample_rate

        def stage(samples: Samples, first: int) -> Samples:
            turns = per_sample * (first + np.arange(samples.shape[1]))
            tone = np.exp(2j * np.pi * (turns - np.floor(turns))).astype(np.complex64)
            samples += column * tone
            return samples

        return stage

    def amplitudes(self, context: Context) -> NDArray[np.complex64]:
        """Complex amplitude on each channel (Nr,); raises InputError for values out of range."""
        limit = context.sample_rate / 2
        if not abs(self.frequency_hz) < limit:
            expected = f"less than {limit:g} Hz either way"
            raise InputError("interferer", "frequency", self.frequency_hz, expected)
        if not -200.0 <= self.power_db <= 100.0:
            raise InputError("interferer", "power", self.power_db, "-200 to 100 dB over payload")
        size = np.sqrt(context.signal_power) * 10 ** (self.power_db / 20)
        return np.asarray(size * self.heard_as(context), np.complex64)

    def heard_as(self, context: Context) -> NDArray[np.complex128]:
        """The signature, complex128 (Nr,), unit mean power."""
        channels = context.receive_channels
        if self.signature is None:
            # A key of its own: chunks are keyed by their first sample, which is never negative.
            angles = context.generator(1 << 62).uniform(0.0, 2 * np.pi, channels)
            return np.asarray(np.exp(1j * angles), np.complex128)
        given = np.asarray(self.signature, np.complex128)
        power = np.mean(np.abs(given) ** 2) if given.size else 0.0
        if given.shape != (channels,) or not (np.isfinite(power) and power > 0):
            expected = f"{channels} finite numbers, not all 0"
            raise InputError("interferer", "signature", self.signature, expected)
        return np.asarray(given / np.sqrt(power), np.complex128)
