"""Kernel of the test for echoes: bare arrays in and out."""

from __future__ import annotations

import numpy as np

from spatiq.kernels import C64, C128, F64, I64, U8, kernel


@kernel
def neighbour_sums(
    symbols: C64,
    channel: C128,
    decided: I64,
    words: tuple[I64, I64, C64],
    follows: U8,
    before: C128,
    behind: C128,
    sums: F64,
) -> None:
    """What the decisions leave of each period, correlated with its neighbours' transmit vectors.

    Args:
        symbols: complex64 (Kp, Nr); payload vectors, carrier phase removed.
        channel: complex128 (Nr, Nt).
        decided: (Kp,); words.
        words: codeword vectors, sparse: pointer, antenna, value.
        follows: uint8 (Kp,); 1 where the payload period before is the symbol period before.
        before, behind: complex128 (Nr, Nt), filled: sum of e[k] x[k-1]^H, of e[k-1] x[k]^H.
        sums: (3,), filled: pairs, energy of e, energy of H x.
    """
    pointer, antenna, value = words
    channels = symbols.shape[1]
    before[:] = 0.0
    behind[:] = 0.0
    left = np.zeros(channels, np.complex128)
    earlier = np.zeros(channels, np.complex128)
    pairs, error, reference = 0.0, 0.0, 0.0
    for k in range(decided.size):
        c = decided[k]
        for r in range(channels):
            v = 0j
            for j in range(pointer[c], pointer[c + 1]):
                v += channel[r, antenna[j]] * value[j]
            e = symbols[k, r] - v
            left[r] = e
            error += e.real * e.real + e.imag * e.imag
            reference += v.real * v.real + v.imag * v.imag
        if follows[k]:
            pairs += 1.0
            p = decided[k - 1]
            for r in range(channels):
                for j in range(pointer[p], pointer[p + 1]):
                    before[r, antenna[j]] += left[r] * np.conj(value[j])
                for j in range(pointer[c], pointer[c + 1]):
                    behind[r, antenna[j]] += earlier[r] * np.conj(value[j])
        for r in range(channels):
            earlier[r] = left[r]
    sums[0], sums[1], sums[2] = pairs, error, reference
