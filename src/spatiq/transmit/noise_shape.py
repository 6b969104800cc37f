"""Noise that is coloured, or correlated or of different power over the receive channels."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.signal import lfilter

from spatiq.errors import InputError
from spatiq.transmit.channel import Matrix, correlation_matrix, hermitian_root
from spatiq.transmit.front_end import Context, Samples, Stage, per_channel

# Poles closer to the unit circle than this would take a warm-up of more than 200 000 samples.
LARGEST_POLE = 0.9999
# What of the impulse response is left when the filter counts as settled: -160 dB.
SETTLED = 1e-8
WARM_UP_KEY = 1 << 62


@dataclass(frozen=True)
class NoiseShape:
    """Colour of noise: w[n] = c (sum_i taps[i] v[n - i] - sum_i feedback[i] w[n - 1 - i]), v white.

    c makes the power of w that of v, so that N0 stays the variance of a sample; what a matched
    filter passes of it depends on the colour. All-pole (autoregressive) and FIR (moving-average)
    processes: S. M. Kay, "Modern Spectral Estimation", 1988, ch. 5.

    Attributes:
        taps: FIR coefficients, real or complex, 1 to 4096 of them.
        feedback: coefficients a1, a2, ... of the all-pole part 1 / (1 + a1 z^-1 + a2 z^-2 ...).
    """

    taps: Sequence[complex] = (1.0,)
    feedback: Sequence[complex] = ()

    def settling(self) -> int:
        """Samples after which the impulse response has died away.

        Raises:
            InputError: no taps or only zeros, or a pole too near the unit circle or outside it.
        """
        if not 1 <= len(self.taps) <= 4096 or len(self.feedback) > 64:
            found = f"{len(self.taps)} taps, {len(self.feedback)} feedback coefficients"
            raise InputError("noise", "shape", found, "1 to 4096 taps, 0 to 64 feedback")
        if not np.isfinite([*self.taps, *self.feedback]).all() or not np.any(self.taps):
            raise InputError("noise", "shape", "taps all 0 or not finite", "finite, not all 0")
        radius = float(np.max(np.abs(np.roots([1.0, *self.feedback])), initial=0.0))
        if radius > LARGEST_POLE:
            expected = f"poles within {LARGEST_POLE} of the origin"
            raise InputError("noise", "shape", f"a pole at radius {radius:.6g}", expected)
        length = len(self.taps) + len(self.feedback)
        if radius > 0:
            # Poles in one place grow like n^(m-1) r^n before they decay: the factor covers them.
            length += int(np.ceil(2 * np.log(SETTLED) / np.log(max(radius, 1e-3))))
        return length

    def scale(self) -> float:
        """c: one over the root of the impulse response's energy."""
        impulse = np.zeros(self.settling())
        impulse[0] = 1.0
        response = lfilter(np.asarray(self.taps), [1.0, *self.feedback], impulse)
        return float(1 / np.sqrt(np.sum(np.abs(response) ** 2)))

    def response(self, frequency: ArrayLike) -> NDArray[np.complex128]:
        """Frequency response, c included; frequency in cycles per sample."""
        z = np.exp(-2j * np.pi * np.asarray(frequency, np.float64))
        above = np.polynomial.polynomial.polyval(z, np.asarray(self.taps))
        below = np.polynomial.polynomial.polyval(z, np.asarray([1.0, *self.feedback]))
        return np.asarray(self.scale() * above / below, np.complex128)


@dataclass(frozen=True, eq=False)
class ShapedNoise:
    """Adds circular Gaussian noise of a given covariance over the receive channels, and colour.

    Attributes:
        covariance: complex (Nr, Nr), Hermitian and positive semidefinite; of the samples.
        shape: colour, the same on all receive channels; None: white.
    """

    covariance: Matrix
    shape: NoiseShape | None = None

    def begin(self, context: Context) -> Stage:
        """The stage; the noise is stationary from the first sample on."""
        channels = context.receive_channels
        mixing = hermitian_root(self.covariance).astype(np.complex64)

        def drawn(key: int, count: int) -> Samples:
            parts = context.generator(key).standard_normal((channels, 2 * count), np.float32)
            parts *= np.float32(np.sqrt(0.5))
            return np.asarray(mixing @ parts.view(np.complex64), np.complex64)

        if self.shape is None:

            def white(samples: Samples, first: int) -> Samples:
                samples += drawn(first, samples.shape[1])
                return samples

            return white
        taps = self.shape.scale() * np.asarray(self.shape.taps, np.complex128)
        feedback = np.asarray([1.0, *self.shape.feedback], np.complex128)
        state = np.zeros((channels, max(len(taps), len(feedback)) - 1), np.complex128)
        _, state = lfilter(
            taps, feedback, drawn(WARM_UP_KEY, self.shape.settling()), axis=1, zi=state
        )

        def coloured(samples: Samples, first: int) -> Samples:
            nonlocal state
            noise, state = lfilter(taps, feedback, drawn(first, samples.shape[1]), axis=1, zi=state)
            samples += noise.astype(np.complex64)
            return samples

        return coloured


def noise_covariance(
    receive_channels: int, power_db: ArrayLike | None, correlation: complex | ArrayLike | None
) -> Matrix | None:
    """Covariance over the receive channels in units of N0; None: the identity.

    Args:
        receive_channels: Nr.
        power_db: noise power of each receive channel over N0, dB (one value, or Nr); None: 0.
        correlation: coefficient of the exponential model, or matrix (Nr, Nr), of noise normalised
            to unit power; None: independent.

    Raises:
        InputError: values that do not fit the receive channels, or no correlation matrix.
    """
    if power_db is None and correlation is None:
        return None
    levels = per_channel(0.0 if power_db is None else power_db, receive_channels, "noise", "power")
    if np.any(np.abs(levels) > 100):
        raise InputError("noise", "power", power_db, "-100 to 100 dB over N0")
    matrix = correlation_matrix(correlation, receive_channels, "noise")
    if matrix is None:
        matrix = np.eye(receive_channels, dtype=np.complex128)
    size = 10 ** (levels.real / 20)
    return np.asarray(size[:, None] * matrix * size[None, :], np.complex128)
