"""Kernels of measuring: bare arrays in and out."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from spatiq.kernels import C64, C128, F64, I64, U8, kernel


@kernel
def compare_words(
    decided: I64, sent: I64, set_index: I64, symbol_index: I64, confusion: I64, counts: I64
) -> None:
    """Compare the words of one frame.

    Args:
        decided, sent: (Kp,); sent is -1 where unknown.
        set_index, symbol_index: (C,); of each word.
        confusion: (A, A); added to, row = set sent.
        counts: (3,); periods compared, wrong antenna, right antenna but wrong symbol; filled.
    """
    counts[:] = 0
    for k in range(decided.size):
        if sent[k] < 0:
            continue
        row, column = set_index[sent[k]], set_index[decided[k]]
        confusion[row, column] += 1
        counts[0] += 1
        if row != column:
            counts[1] += 1
        elif symbol_index[sent[k]] != symbol_index[decided[k]]:
            counts[2] += 1


@kernel
def count_bits(
    decided: U8, sent: U8, counted: NDArray[np.bool_], spatial: NDArray[np.bool_], counts: I64
) -> None:
    """Bits compared and wrong of each frame.

    Args:
        decided, sent: uint8 (F, n).
        counted: bool (F, n); bits to compare.
        spatial: bool (n,); bits that chose the antenna.
        counts: int64 (F, 2, 2), filled: signal and spatial bits, each compared and wrong.
    """
    counts[:] = 0
    for f in range(decided.shape[0]):
        for i in range(decided.shape[1]):
            kind = np.int64(spatial[i])
            used = np.int64(counted[f, i])
            counts[f, kind, 0] += used
            counts[f, kind, 1] += used & np.int64(decided[f, i] != sent[f, i])


@kernel
def error_vectors(
    y: C64, channel: C128, words: I64, pointer: I64, antenna: I64, value: C64, sums: F64
) -> None:
    """Energies of error and reference of one frame, per antenna.

    A period counts for all antennas active in it, for each of n with the weight 1/n, so that sums
    over the antennas are sums over the periods. Periods in which nothing is sent do not count.

    The equalised error is that of z = (H x)^H y / ||H x||^2 against 1, times ||x||: with one active
    antenna, that of the symbol after projection on the antenna's channel.

    Args:
        y: complex64 (Kp, Nr); carrier and phase removed.
        channel: complex128 (Nr, Nt).
        words: (Kp,); reference word of each period, -1 to leave it out.
        pointer, antenna, value: codeword vectors, sparse.
        sums: (6, Nt) float64, filled: error energy, reference energy, equalised error energy (over
            the received energy of a unit symbol), equalised periods, received energy, sent energy.
    """
    sums[:] = 0.0
    channels = y.shape[1]
    for k in range(words.size):
        c = words[k]
        if c < 0 or pointer[c] == pointer[c + 1]:
            continue
        error, reference, projected, gain, sent = 0.0, 0.0, 0j, 0.0, 0.0
        first = value[pointer[c]]
        for r in range(channels):
            v = 0j
            for j in range(pointer[c], pointer[c + 1]):
                v += channel[r, antenna[j]] * value[j]
            e = y[k, r] - v
            error += e.real * e.real + e.imag * e.imag
            reference += v.real * v.real + v.imag * v.imag
            unit = v / first
            projected += np.conj(unit) * y[k, r]
            gain += unit.real * unit.real + unit.imag * unit.imag
        deviation = projected / gain - first if gain > 0.0 else 0j
        share = 1.0 / (pointer[c + 1] - pointer[c])
        for j in range(pointer[c], pointer[c + 1]):
            a = antenna[j]
            power = value[j].real * value[j].real + value[j].imag * value[j].imag
            sums[0, a] += share * error
            sums[1, a] += share * reference
            sums[3, a] += share
            sums[5, a] += power
            sent += power
        rescaled = sent / (first.real * first.real + first.imag * first.imag)
        equalised = deviation.real * deviation.real + deviation.imag * deviation.imag
        for j in range(pointer[c], pointer[c + 1]):
            sums[2, antenna[j]] += share * equalised * rescaled
        sums[4, antenna[pointer[c]]] += reference
