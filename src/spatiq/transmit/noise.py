"""Receiver noise: white, circular, Gaussian."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from spatiq.errors import InputError
from spatiq.transmit.front_end import Context, Samples, Stage


@dataclass(frozen=True)
class Noise:
    """Adds CN(0, N0) to every sample of every receive channel, independently.

    The matched filter has unit energy, so N0 is also the noise variance of a received symbol.

    Attributes:
        variance: N0, variance of a complex sample; 0 adds nothing.
    """

    variance: float

    def begin(self, context: Context) -> Stage:
        """The stage; raises InputError for a variance that is negative or not finite."""
        if not 0.0 <= self.variance < np.inf:
            raise InputError("noise", "variance", self.variance, "a finite number, 0 or more")
        deviation = np.float32(np.sqrt(self.variance / 2))

        def stage(samples: Samples, first: int) -> Samples:
            if deviation == 0:
                return samples
            rng = context.generator(first)
            noise = rng.standard_normal((samples.shape[0], 2 * samples.shape[1]), np.float32)
            noise *= deviation
            samples += noise.view(np.complex64)
            return samples

        return stage


def noise_variance(snr_db: float, mean_power: float) -> float:
    """N0 for a ratio in dB of `mean_power` (signal power at one receive antenna) to N0; inf: 0."""
    if np.isnan(snr_db) or snr_db == -np.inf:
        raise InputError("SNR", "", snr_db, "a number of dB, or infinity for no noise")
    return float(mean_power * 10 ** (-snr_db / 10))
