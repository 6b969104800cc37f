"""Samples without any frame: noise and interference of several kinds, for counting false alarms."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from spatiq.transmit.front_end import Impairment, begin_all
from spatiq.transmit.interferer import Interferer
from spatiq.transmit.narrow_band import NarrowBandNoise
from spatiq.transmit.noise_shape import NoiseShape, ShapedNoise, noise_covariance

SAMPLES_PER_SYMBOL = 4.0


@dataclass(frozen=True)
class Scene:
    """What there is instead of frames.

    Attributes:
        receivers: Nr.
        levels_db: noise power of the channels, dB; None: even.
        correlation: of the noise over the channels, exponential model.
        pole: of first-order autoregressive noise; 0: white.
        tone: frequency of a tone, cycles per symbol period; None: none.
        band: width of narrow-band noise (half-power, share of the symbol rate); None: none.
        over_noise_db: power of tone or narrow-band noise over N0 at the matched filter.
    """

    receivers: int
    levels_db: tuple[float, ...] | None = None
    correlation: float = 0.0
    pole: float = 0.0
    tone: float | None = None
    band: float | None = None
    over_noise_db: float = 0.0

    def samples(self, count: int, seed: int) -> NDArray[np.complex64]:
        """Complex64 (Nr, count)."""
        levels = self.levels_db
        covariance = noise_covariance(self.receivers, levels, self.correlation or None)
        if covariance is None:
            covariance = np.eye(self.receivers, dtype=np.complex128)
        shape = NoiseShape(feedback=(-self.pole,)) if self.pole else None
        parts: list[Impairment] = [ShapedNoise(covariance, shape)]
        if self.tone is not None:
            parts.append(Interferer(self.tone / SAMPLES_PER_SYMBOL, self.over_noise_db))
        if self.band is not None:
            width = self.band / SAMPLES_PER_SYMBOL
            parts.append(NarrowBandNoise(0.05 / SAMPLES_PER_SYMBOL, width, self.over_noise_db))
        # A sample rate of 1 Hz: frequencies are in cycles per sample. Noise has unit power in each
        # sample, and so at the unit-energy matched filter, where a tone is stronger by the ratio.
        power = 1.0 / SAMPLES_PER_SYMBOL
        samples = np.zeros((self.receivers, count), np.complex64)
        for stage in begin_all(
            parts, 1.0, self.receivers, seed=seed, signal_power=power, noise_power=1.0
        ):
            samples = stage(samples, 0)
        return samples
