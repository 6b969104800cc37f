"""Narrow-band noise: an interferer of a stated bandwidth, its waveform known to nobody.

First-order autoregressive: the spectrum falls off like that of a single tuned circuit, to half at
either end of the width.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike
from scipy.signal import lfilter

from spatiq.errors import InputError
from spatiq.transmit.front_end import Context, Samples, Stage
from spatiq.transmit.interferer import Interferer


@dataclass(frozen=True, eq=False)
class NarrowBandNoise:
    """Adds noise around a frequency, one waveform on all channels, stationary from the start.

    Attributes:
        frequency_hz: centre, within half the sample rate either way.
        width_hz: between the half-power points, above 0 and at most a quarter of the sample rate.
        power_db: mean power over the receive channels, dB relative to the expected payload power of
            a sample at E|h|^2 = 1.
        signature: as an `Interferer`'s.
    """

    frequency_hz: float
    width_hz: float
    power_db: float
    signature: ArrayLike | None = None

    def begin(self, context: Context) -> Stage:
        """The stage; raises InputError for values out of range."""
        centre = Interferer(self.frequency_hz, self.power_db, self.signature)
        column = centre.amplitudes(context)[:, None]
        if not 0 < self.width_hz <= context.sample_rate / 4:
            expected = f"above 0, at most {context.sample_rate / 4:g} Hz"
            raise InputError("interferer", "width", self.width_hz, expected)
        # z-transform pole exp(-pi w): -3 dB at +-w/2 for widths well below the sample rate.
        pole = np.exp(-np.pi * self.width_hz / context.sample_rate)
        feedback = [1.0, -pole * np.exp(2j * np.pi * self.frequency_hz / context.sample_rate)]
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
