"""Kernels of the frame search: bare arrays in and out."""

from __future__ import annotations

import numpy as np

from spatiq.kernels import C64, F32, F64, I32, kernel


@kernel
def window_energy(halves: C64, length: int, inverse: F32) -> None:
    """1 / energy of `length` symbol periods from each lag on, all channels.

    Args:
        halves: complex64 (2, Nr, n); even and odd half-symbol instants.
        inverse: float32 (2, n-length+1); filled. A window 100 dB below the strongest is rounding
            residue of its neighbours, carries no evidence, and gets 0.
    """
    channels = halves.shape[1]
    windows = np.empty(inverse.shape, np.float64)
    strongest = 0.0
    for h in range(2):
        energy = np.float64(0.0)
        for i in range(length - 1):
            for r in range(channels):
                v = halves[h, r, i]
                energy += np.float64(v.real) ** 2 + np.float64(v.imag) ** 2
        for lag in range(inverse.shape[1]):
            for r in range(channels):
                v = halves[h, r, lag + length - 1]
                energy += np.float64(v.real) ** 2 + np.float64(v.imag) ** 2
            windows[h, lag] = energy
            strongest = max(strongest, energy)
            for r in range(channels):
                v = halves[h, r, lag]
                energy -= np.float64(v.real) ** 2 + np.float64(v.imag) ** 2
    floor = max(1e-10 * strongest, 1e-30)
    for h in range(2):
        for lag in range(inverse.shape[1]):
            inverse[h, lag] = 1.0 / windows[h, lag] if windows[h, lag] > floor else 0.0


@kernel
def raise_peak(
    correlation: F32, inverse: F32, carrier_bin: int, metric: F32, best: F32, where: I32
) -> None:
    """Raise `best` (and note the bin in `where`) to the metric of one carrier bin.

    Args:
        correlation: float32 (2, L, n, 2); correlation with each basis row in each channel (L of
            them), real and imaginary parts side by side.
        inverse: float32 (2, lags); 1 / window energy.
        carrier_bin: index to note.
        metric: float32 (lags,); scratch.
        best, where: (2, lags).
    """
    lags = inverse.shape[1]
    for h in range(2):
        for i in range(lags):
            metric[i] = np.float32(0.0)
        for c in range(correlation.shape[1]):
            part = correlation[h, c]
            for i in range(lags):
                metric[i] += part[i, 0] * part[i, 0] + part[i, 1] * part[i, 1]
        scale = inverse[h]
        top = best[h]
        at = where[h]
        for i in range(lags):
            m = metric[i] * scale[i]
            higher = m > top[i]
            top[i] = m if higher else top[i]
            at[i] = carrier_bin if higher else at[i]


@kernel
def metric_at(y: C64, basis: C64, carriers: F64, lags: int) -> F64:
    """Metric by direct correlation.

    Args:
        y: complex64 (Nr, m); half-symbol instants, m >= lags + 2*(N-1).
        basis: complex64 (P, N).
        carriers: cycles per symbol period, (B,).
        lags: number of lags.

    Returns:
        float64 (lags, B).
    """
    rank, length = basis.shape
    out = np.zeros((lags, carriers.size))
    for b in range(carriers.size):
        turned = np.empty((rank, length), np.complex128)
        for i in range(length):
            angle = 2.0 * np.pi * carriers[b] * i
            turn = complex(np.cos(angle), np.sin(angle))
            for p in range(rank):
                turned[p, i] = np.conj(basis[p, i] * turn)
        for lag in range(lags):
            energy = 0.0
            projected = 0.0
            for r in range(y.shape[0]):
                for p in range(rank):
                    total = 0j
                    for i in range(length):
                        total += turned[p, i] * y[r, lag + 2 * i]
                    projected += total.real * total.real + total.imag * total.imag
                for i in range(length):
                    v = y[r, lag + 2 * i]
                    energy += np.float64(v.real) ** 2 + np.float64(v.imag) ** 2
            out[lag, b] = projected / energy if energy > 1e-30 else 0.0
    return out
