"""Channels that change within a frame: Doppler fading as a sum of sinusoids."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError
from spatiq.kernels import kernel
from spatiq.transmit.channel import Fading, Matrix, Mixing

# Phasors are set anew this often, so that rounding does not build up.
PHASOR_RESET = 256
# Coefficients worked on at a time.
TOGETHER = 1 << 20
LARGEST_DOPPLER = 0.05


@kernel
def add_sinusoids(
    out: NDArray[np.complex128],
    start: float,
    step: float,
    doppler: NDArray[np.float64],
    phases: NDArray[np.float64],
) -> None:
    """out[t, p] = sum_n exp(j (2 pi doppler[p, n] (start + t step) + phases[p, n])) / sqrt(N).

    Args: out complex128 (T, P), C-contiguous, overwritten; start and step float64, units of time;
    doppler float64 (P, N), cycles per unit of time; phases float64 (P, N), radians.
    """
    times, pairs = out.shape
    sinusoids = doppler.shape[1]
    scale = 1.0 / np.sqrt(sinusoids)
    for t in range(times):
        for p in range(pairs):
            out[t, p] = 0.0
    for p in range(pairs):
        for n in range(sinusoids):
            turn = 2 * np.pi * doppler[p, n] * step
            rotor = complex(np.cos(turn), np.sin(turn))
            phasor = 0.0j
            for t in range(times):
                if t % PHASOR_RESET == 0:
                    turns = doppler[p, n] * (start + t * step)
                    angle = 2 * np.pi * (turns - np.floor(turns)) + phases[p, n]
                    phasor = scale * complex(np.cos(angle), np.sin(angle))
                out[t, p] += phasor
                phasor *= rotor


@dataclass(frozen=True, eq=False)
class Field:
    """A channel as a function of time.

    H(t) = gain * (mixing of G(t)), G[r, a](t) = sum_n exp(j (2 pi doppler t + phases)) / sqrt(N),
    t in nominal symbol periods from the first sample.

    Attributes:
        doppler: float64 (Nr, Nt, N), cycles per nominal symbol period.
        phases: float64 (Nr, Nt, N), radians.
        mixing: line of sight and correlation.
        gain: complex128 (Nr, 1); amplitude of each receive channel, converter gain included.
    """

    doppler: NDArray[np.float64]
    phases: NDArray[np.float64]
    mixing: Mixing
    gain: Matrix

    def along(self, start: float, step: float, count: int) -> Matrix:
        """Channels at start, start + step, ...: complex128 (count, Nr, Nt)."""
        receive, transmit, sinusoids = self.doppler.shape
        pairs = receive * transmit
        scattered = np.empty((count, pairs), np.complex128)
        doppler = np.ascontiguousarray(self.doppler.reshape(pairs, sinusoids))
        phases = np.ascontiguousarray(self.phases.reshape(pairs, sinusoids))
        add_sinusoids(scattered, float(start), float(step), doppler, phases)
        mixed = self.mixing.mixed(scattered.reshape(count, receive, transmit))
        return np.asarray(self.gain * mixed, np.complex128)

    def received(self, start: float, step: float, vectors: Matrix) -> Matrix:
        """H x of consecutive symbol periods: vectors (K, Nt) -> complex128 (K, Nr)."""
        receive, transmit, _ = self.doppler.shape
        pieces = max(1, TOGETHER // (receive * transmit * PHASOR_RESET)) * PHASOR_RESET
        out = np.empty((len(vectors), receive), np.complex128)
        for first in range(0, len(vectors), pieces):
            part = vectors[first : first + pieces]
            channels = self.along(start + first * step, step, len(part))
            out[first : first + pieces] = np.einsum("kra,ka->kr", channels, part)
        return out


@dataclass(frozen=True, eq=False)
class Doppler:
    """Rayleigh or Rician fading that moves, with the autocorrelation of isotropic scattering.

    Each pair of antennas has its own sum of N sinusoids at Doppler shifts
    rate * cos((2 pi n + theta_n) / N), theta_n and their phases uniform and independent: the mean
    over realisations of conj(h(t)) h(t + tau) is J0(2 pi rate tau) for any N, and E|h|^4 = 2 - 1/N
    against 2 of a Gaussian. Model: C. Xiao, Y. R. Zheng, N. C. Beaulieu, "Novel sum-of-sinusoids
    simulation models for Rayleigh and Rician fading channels", IEEE Trans. Wireless Commun. 5(12),
    2006, after R. H. Clarke, "A statistical theory of mobile-radio reception", Bell Syst. Tech. J.
    47, 1968 (both from memory). The line of sight stands still.

    The channel of a symbol is that at the symbol's instant, for the whole of its pulse. At rate
    1e-3 what that leaves out is more than 45 dB below the signal.

    Attributes:
        rate: largest Doppler shift, cycles per nominal symbol period, above 0, up to 0.05.
        fading: K, line of sight and correlation; its `constant` is not heeded.
        sinusoids: N, 8 to 1024.
    """

    rate: float
    fading: Fading = field(default_factory=Fading)
    sinusoids: int = 64

    def field(self, rng: np.random.Generator, receive: int, transmit: int) -> Field:
        """A realisation, E|h|^2 = 1.

        Raises:
            InputError: rate or number of sinusoids out of range, or fading that does not fit.
        """
        if not 0.0 < self.rate <= LARGEST_DOPPLER:
            expected = f"above 0, up to {LARGEST_DOPPLER:g} of the symbol rate"
            raise InputError("channel", "Doppler", self.rate, expected)
        if not 8 <= self.sinusoids <= 1024:
            raise InputError("channel", "sinusoids", self.sinusoids, "8 to 1024")
        shape = (receive, transmit, self.sinusoids)
        angles = 2 * np.pi * np.arange(self.sinusoids) + rng.uniform(-np.pi, np.pi, shape)
        return Field(
            doppler=self.rate * np.cos(angles / self.sinusoids),
            phases=rng.uniform(-np.pi, np.pi, shape),
            mixing=self.fading.mixing(receive, transmit),
            gain=np.ones((receive, 1), np.complex128),
        )
