"""Kernels of detection: bare arrays in and out."""

from __future__ import annotations

import numpy as np

from spatiq.kernels import C64, F32, I64, kernel
from spatiq.receiver.soft_kernels import VECTORS, block_metrics


@kernel
def detect_maximum_likelihood(y: C64, real: F32, imag: F32, power: F32, words: I64) -> None:
    """argmin over c of ||y - g[c]||^2 for each period; the lowest index wins a tie.

    Args:
        y: complex64 (K, Nr).
        real, imag: float32 (Nr, C); received codebook g = H x.
        power: float32 (C,); ||g[c]||^2.
        words: int64 (K,); filled.
    """
    channels = y.shape[1]
    metric = np.empty((power.size, VECTORS), np.float32)
    best, second = np.empty(VECTORS, np.float32), np.empty(VECTORS, np.float32)
    nearest = np.empty(VECTORS, np.int32)
    z_real = np.empty((channels, VECTORS), np.float32)
    z_imag = np.empty((channels, VECTORS), np.float32)
    for first in range(0, y.shape[0], VECTORS):
        count = min(VECTORS, y.shape[0] - first)
        for k in range(count):
            for r in range(channels):
                z_real[r, k] = y[first + k, r].real
                z_imag[r, k] = y[first + k, r].imag
        block_metrics(real, imag, power, z_real, z_imag, count, metric, best, second, nearest)
        for k in range(count):
            words[first + k] = nearest[k]


@kernel
def detect_two_step(
    y: C64, columns: C64, members: I64, counts: I64, values: C64, words: I64
) -> None:
    """Antenna by argmax |h^H y| / ||h||, then the nearest symbol of that antenna.

    Args:
        y: complex64 (K, Nr).
        columns: complex64 (A, Nr); channel column of each antenna.
        members: int64 (A, C); words of each antenna, -1 beyond counts[a].
        counts: int64 (A,).
        values: complex64 (C,); symbol of each word.
        words: int64 (K,); filled.
    """
    antennas, channels = columns.shape
    norm = np.empty(antennas, np.float32)
    for a in range(antennas):
        total = np.float32(0.0)
        for r in range(channels):
            total += columns[a, r].real ** 2 + columns[a, r].imag ** 2
        norm[a] = total
    for k in range(y.shape[0]):
        best, chosen = np.float32(-1.0), 0
        best_re, best_im = np.float32(0.0), np.float32(0.0)
        for a in range(antennas):
            re, im = np.float32(0.0), np.float32(0.0)
            for r in range(channels):
                h, v = columns[a, r], y[k, r]
                re += h.real * v.real + h.imag * v.imag
                im += h.real * v.imag - h.imag * v.real
            score = (re * re + im * im) / norm[a] if norm[a] > 0.0 else np.float32(0.0)
            if score > best:
                best, chosen, best_re, best_im = score, a, re, im
        nearest = np.float32(3.0e38)
        for m in range(counts[chosen]):
            word = members[chosen, m]
            d_re = best_re - norm[chosen] * values[word].real
            d_im = best_im - norm[chosen] * values[word].imag
            distance = d_re * d_re + d_im * d_im
            if distance < nearest:
                nearest = distance
                words[k] = word
