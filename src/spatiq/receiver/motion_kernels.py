"""Kernel of the motion test: what the refit's residuals say along a frame."""

from __future__ import annotations

import numpy as np

from spatiq.kernels import C64, C128, F32, F64, kernel


@kernel
def motion_sums(
    y: F32, mean: C64, channel: C128, scores: C128, energy: F64, reference: F64
) -> None:
    """Sums over the J parts of a frame, for the test of whether anything moved.

    Args:
        y: float32 (Ka, 2, Nr); received vectors, carrier phase removed.
        mean: complex64 (Ka, Nt); E[x] of the active periods.
        channel: complex128 (Nr, Nt); H.
        scores: complex128 (J, Nr, Nt), filled: (y - H E[x]) E[x]^H.
        energy: float64 (J, Nt), filled: |E[x_a]|^2.
        reference: float64 (J,), filled: ||H E[x]||^2.
    """
    scores[:] = 0.0
    energy[:] = 0.0
    reference[:] = 0.0
    channels, antennas = channel.shape
    used = np.empty(antennas, np.int64)
    for i in range(mean.shape[0]):
        j = i * reference.size // mean.shape[0]
        count = 0
        for a in range(antennas):
            v = mean[i, a]
            if v != 0.0:
                used[count] = a
                count += 1
                energy[j, a] += v.real * v.real + v.imag * v.imag
        for r in range(channels):
            sent = 0j
            for n in range(count):
                sent += channel[r, used[n]] * mean[i, used[n]]
            reference[j] += sent.real * sent.real + sent.imag * sent.imag
            error = complex(y[i, 0, r], y[i, 1, r]) - sent
            for n in range(count):
                scores[j, r, used[n]] += error * np.conj(mean[i, used[n]])
