"""Clipping ahead of the converter: an amplifier or limiter that saturates."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError
from spatiq.transmit.front_end import Context, Samples, Stage


@dataclass(frozen=True, eq=False)
class Clipping:
    """Limits I and Q, each on its own, so that samples pile up at the level.

    A Gaussian component of unit rms clipped at +-a keeps the power
    erf(a / sqrt 2) - 2 a phi(a) + 2 a^2 Q(a), and correlates with what it was by erf(a / sqrt 2)
    (J. J. Bussgang, 1952, MIT RLE report 216; from memory).

    Attributes:
        level_db: clipping level of a component over its expected rms (payload at E|h|^2 = 1, plus
            noise), dB, -20 to 60.
        clipped: int64 (Nr,) counter of samples with a clipped component, reset by `begin`; None
            counts nothing.
    """

    level_db: float
    clipped: NDArray[np.int64] | None = None

    def begin(self, context: Context) -> Stage:
        """The stage; raises InputError for a level out of range."""
        if not -20.0 <= self.level_db <= 60.0:
            raise InputError("clipping", "level", self.level_db, "-20 to 60 dB over rms")
        rms = np.sqrt((context.signal_power + context.noise_power) / 2)
        level = np.float32(rms * 10 ** (self.level_db / 20))
        counter = self.clipped
        if counter is not None:
            counter[:] = 0

        def stage(samples: Samples, first: int) -> Samples:
            parts = samples.view(np.float32)
            if counter is not None:
                beyond = np.abs(parts) > level
                counter[:] += np.count_nonzero(beyond[:, ::2] | beyond[:, 1::2], axis=1)
            np.clip(parts, -level, level, out=parts)
            return samples

        return stage
