"""DC offset: leakage of the local oscillator, a line at zero frequency."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from spatiq.errors import InputError
from spatiq.transmit.front_end import Context, Samples, Stage, per_channel


@dataclass(frozen=True, eq=False)
class DcOffset:
    """Adds a constant to each receive channel.

    Its power is stated relative to the expected payload power of a sample at E|h|^2 = 1. A pulse
    with |P(0)|^2 = 1 (root raised cosine) hands that ratio on to the symbols: without correction
    the EVM is 10^(level / 20). On carrier leakage: B. Razavi, "Design considerations for
    direct-conversion receivers", IEEE Trans. Circuits Syst. II 44(6), 1997 (from memory).

    Attributes:
        level_db: dB relative to payload; one, or one for each receive channel; -inf: none.
        angle_deg: angle of the constant in the complex plane; one, or one for each receive channel.
    """

    level_db: ArrayLike
    angle_deg: ArrayLike = 45.0

    def begin(self, context: Context) -> Stage:
        """The stage; raises InputError for values that do not fit the receive channels."""
        levels = np.atleast_1d(np.asarray(self.level_db, np.float64))
        if np.any(np.isnan(levels)) or np.any(levels > 60):
            raise InputError("DC offset", "level", self.level_db, "at most 60 dB")
        amplitudes = np.sqrt(context.signal_power) * 10 ** (levels / 20)
        size = per_channel(amplitudes, context.receive_channels, "DC offset", "level")
        angle = per_channel(self.angle_deg, context.receive_channels, "DC offset", "angle").real
        constant = (size * np.exp(1j * np.radians(angle))).astype(np.complex64)[:, None]

        def stage(samples: Samples, first: int) -> Samples:
            samples += constant
            return samples

        return stage
