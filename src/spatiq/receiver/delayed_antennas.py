"""Antennas of different delay: what the receive channels see, and what is sufficient to decide.

Antenna a sends its symbols tau_a symbol periods late. With the matched filter's output y(t), g the
pulse's autocorrelation and x_k the transmit vectors, everything that the samples tell about the
symbols is in

    z_k[a] = h_a^H y(k + tau_a) = sum over d of (G_d x_{k+d})[a] + noise,
    G_d[a, b] = h_a^H h_b g(d + tau_b - tau_a),

each antenna read at its own instant, and the likelihood of a sequence is exp(L / N0) with

    L = 2 Re sum_k x_k^H z_k - sum_{k, l} x_k^H G_{l-k} x_l

(G. Ungerboeck, "Adaptive maximum-likelihood receiver for carrier-modulated data-transmission
systems", IEEE Trans. Commun. 22(5), 1974, from memory, with an instant for each antenna). With the
neighbours' part taken out of z, G_0 = B^H B makes of it a vector B x_k + white noise of variance
N0: what any detector of flat channels takes. B has up to Nt rows: delays tell antennas apart, too.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from spatiq.receiver.matched_filter import FilterBank, sample_periods

Complex = NDArray[np.complex128]
Floats = NDArray[np.float64]

_LEAST = 1e-9  # share of the largest eigenvalue of G_0 below which a direction holds nothing


@dataclass(frozen=True, eq=False)
class DelayKernels:
    """Pulse correlations between antennas of given delays, at whole periods.

    Attributes:
        value, slope: float64 (A, A, 2 D + 1); g and g' at d + tau_b - tau_a, d = -D..D.
        now: float64 (A, A); value at d = 0.
    """

    value: Floats
    slope: Floats

    @property
    def reach(self) -> int:
        """D."""
        return int(self.value.shape[2]) // 2

    @property
    def now(self) -> Floats:
        """g(tau_b - tau_a)."""
        return self.value[:, :, self.reach]

    def neighbour(self, d: int) -> Floats:
        """g(d + tau_b - tau_a)."""
        return self.value[:, :, self.reach + d]


def delay_kernels(bank: FilterBank, delays: Floats) -> DelayKernels:
    """Kernels for antennas with delays (A,), symbol periods."""
    g = bank.correlation
    reach = int(np.ceil(g.reach)) + 2
    apart = delays[None, :] - delays[:, None]
    u = np.arange(-reach, reach + 1) + apart[:, :, None]
    return DelayKernels(g.at(g.value, u), g.at(g.slope, u))


def convolved(sent: Complex, kernel: Floats) -> Complex:
    """sum over d of sent[k + d, b] kernel[b, d], complex128 (K, A), for all k.

    Args:
        sent: complex128 (K, A); E[x].
        kernel: float64 (A, 2 D + 1); one antenna's row of a `DelayKernels` array.
    """
    periods, width = sent.shape[0], kernel.shape[1]
    length = scipy.fft.next_fast_len(periods + width)
    turned = scipy.fft.fft(kernel[:, ::-1].T, length, axis=0)
    both = scipy.fft.ifft(scipy.fft.fft(sent, length, axis=0) * turned, axis=0)
    reach = width // 2
    return np.asarray(both[reach : reach + periods], np.complex128)


def read_antennas(
    planes: NDArray[np.float32],
    t0: float,
    step: float,
    delays: Floats,
    periods: NDArray[np.int64],
    phase: Floats,
    bank: FilterBank,
    table: NDArray[np.float32],
) -> Complex:
    """Outputs of a filter table at each antenna's instants, carrier phase removed, (A, n, Nr).

    Args:
        phase: float64 (n,); carrier phase at the periods, radians.
        table: `bank.taps` or `bank.slopes`.
    """
    rate = np.gradient(phase, periods.astype(float)) if periods.size > 1 else np.zeros(1)
    room = np.empty((periods.size, 2, planes.shape[0]), np.float32)
    out = np.empty((delays.size, periods.size, planes.shape[0]), np.complex128)
    for a in range(delays.size):
        sample_periods(planes, t0 + delays[a] * step, step, periods, table, bank.phases, room)
        turn = np.exp(-1j * (phase + delays[a] * rate))
        out[a] = (room[:, 0] + 1j * room[:, 1]) * turn[:, None]
    return out


def factor(gram: Complex) -> tuple[Complex, Complex]:
    """B (Nd, A) with B^H B = gram, and P (Nd, A) with P gram = B: what turns z into B x + noise."""
    values, vectors = np.linalg.eigh(gram)
    kept = values > _LEAST * max(float(values[-1]), 1e-300)
    root = np.sqrt(values[kept])
    return (
        root[:, None] * vectors[:, kept].conj().T,
        vectors[:, kept].conj().T / root[:, None],
    )
