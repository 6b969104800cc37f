"""Gain and phase imbalance between the I and Q branches of each receive channel."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from spatiq.errors import InputError
from spatiq.transmit.front_end import Context, Samples, Stage, per_channel


def imbalance_coefficients(
    gain_db: ArrayLike, phase_deg: ArrayLike
) -> tuple[NDArray[np.complex128], NDArray[np.complex128]]:
    """K1, K2 of y = K1 x + K2 conj(x).

    K1 = (1 + g exp(-j phi)) / 2, K2 = (1 - g exp(j phi)) / 2: M. Valkama, M. Renfors, V. Koivunen,
    "Advanced methods for I/Q imbalance compensation in communication receivers", IEEE Trans. Signal
    Process. 49(10), 2001 (from memory).
    """
    gain = 10 ** (np.asarray(gain_db, np.float64) / 20)
    phase = np.radians(np.asarray(phase_deg, np.float64))
    direct = (1 + gain * np.exp(-1j * phase)) / 2
    image = (1 - gain * np.exp(1j * phase)) / 2
    return np.asarray(direct, np.complex128), np.asarray(image, np.complex128)


@dataclass(frozen=True, eq=False)
class IqImbalance:
    """Mirrors each receive channel's spectrum at zero frequency, weakly.

    Image rejection |K1|^2 / |K2|^2 = (1 + 2 g cos phi + g^2) / (1 - 2 g cos phi + g^2).

    Attributes:
        gain_db: gain of Q over I, dB, -20 to 20; one, or one for each receive channel.
        phase_deg: departure from quadrature, -45 to 45; one, or one for each receive channel.
    """

    gain_db: ArrayLike = 0.0
    phase_deg: ArrayLike = 0.0

    def begin(self, context: Context) -> Stage:
        """The stage; raises InputError for values out of range."""
        channels = context.receive_channels
        gain = per_channel(self.gain_db, channels, "IQ imbalance", "gain").real
        phase = per_channel(self.phase_deg, channels, "IQ imbalance", "phase").real
        if np.any(np.abs(gain) > 20):
            raise InputError("IQ imbalance", "gain", self.gain_db, "-20 to 20 dB")
        if np.any(np.abs(phase) > 45):
            raise InputError("IQ imbalance", "phase", self.phase_deg, "-45 to 45 degrees")
        pair = imbalance_coefficients(gain, phase)
        direct, image = (k.astype(np.complex64)[:, None] for k in pair)

        def stage(samples: Samples, first: int) -> Samples:
            return np.asarray(direct * samples + image * samples.conj(), np.complex64)

        return stage
