"""Kernels of the frame search: bare arrays in and out."""

from __future__ import annotations

import numpy as np

from spatiq.kernels import C64, F32, F64, I64, kernel


@kernel
def peak_metric(
    halves: C64, correlation: C64, length: int, carrier_bin: int, best: F32, where: I64
) -> None:
    """Raise `best` (and note the bin in `where`) to the metric of one carrier bin.

    Args:
        halves: complex64 (2, Nr, n); even and odd half-symbol instants.
        correlation: complex64 (2, Nr, P, n); correlation with each basis row.
        length: N, symbol periods summed.
        carrier_bin: index to note.
        best, where: (2*(n-N+1),); interleaved even, odd.
    """
    channels, n = halves.shape[1], halves.shape[2]
    rank = correlation.shape[2]
    for h in range(2):
        energy = np.float64(0.0)
        for i in range(length - 1):
            for r in range(channels):
                v = halves[h, r, i]
                energy += np.float64(v.real) ** 2 + np.float64(v.imag) ** 2
        for lag in range(n - length + 1):
            for r in range(channels):
                v = halves[h, r, lag + length - 1]
                energy += np.float64(v.real) ** 2 + np.float64(v.imag) ** 2
            projected = np.float32(0.0)
            for r in range(channels):
                for p in range(rank):
                    c = correlation[h, r, p, lag]
                    projected += c.real * c.real + c.imag * c.imag
            # A window that has faded to rounding residue carries no evidence.
            metric = np.float32(projected / energy) if energy > 1e-30 else np.float32(0.0)
            if metric > best[2 * lag + h]:
                best[2 * lag + h] = metric
                where[2 * lag + h] = carrier_bin
            for r in range(channels):
                v = halves[h, r, lag]
                energy -= np.float64(v.real) ** 2 + np.float64(v.imag) ** 2


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
