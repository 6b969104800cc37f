"""Kernel of the motion test: what the refit's residuals say along a frame."""

from __future__ import annotations

import numpy as np

from spatiq.kernels import C64, C128, F32, F64, I64, kernel


@kernel
def motion_sums(
    y: F32,
    mean: C64,
    active_word: I64,
    channel: C128,
    scores: C128,
    energy: F64,
    reference: F64,
) -> None:
    """Sums over the J parts of a frame's payload, for the test of whether anything moved.

    Known symbols are left out: doubtful words count with their mean, and a part of known ones
    beside them would look like motion.

    Args:
        y: float32 (Ka, 2, Nr); received vectors, carrier phase removed.
        mean: complex64 (Ka, Nt); E[x] of the active periods.
        active_word: int64 (Ka,); -1 for known symbols.
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
    count = mean.shape[0]
    for i in range(count):
        if active_word[i] < 0:
            continue
        j = i * reference.size // count
        n = 0
        for a in range(antennas):
            if mean[i, a] != 0.0:
                used[n] = a
                n += 1
                energy[j, a] += mean[i, a].real ** 2 + mean[i, a].imag ** 2
        for r in range(channels):
            sent = 0j
            for m in range(n):
                sent += channel[r, used[m]] * mean[i, used[m]]
            reference[j] += sent.real * sent.real + sent.imag * sent.imag
            error = complex(y[i, 0, r], y[i, 1, r]) - sent
            for m in range(n):
                scores[j, r, used[m]] += error * np.conj(mean[i, used[m]])
