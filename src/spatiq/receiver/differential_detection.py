"""Detection of the differential form: block against block, without channel knowledge.

argmin over X of ||Y_t - Y_{t-1} X||^2. X is unitary, so that this is the largest Re tr(Y_t^H
Y_{t-1} X): a sum over the columns, in which each column's symbol is chosen for itself once the
permutation is given. All permutations are tried, all M^Nt symbols at the cost of M.

Source: Y. Bian et al., "Differential spatial modulation", IEEE Trans. Veh. Technol. 64(7), 2015
(from memory).
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from spatiq.kernels import C64, C128, I64, kernel
from spatiq.signal.codebooks import DifferentialCodebook


def detect_blocks(y: NDArray[np.complex64], codebook: DifferentialCodebook) -> NDArray[np.int64]:
    """Words of a run of blocks.

    Args:
        y: complex64, shape ((n + 1) Nt, Nr); the reference block, then a block a word; one scale.
        codebook: of the differential form.

    Returns:
        int64, shape (n,).
    """
    words = np.empty(max(y.shape[0] // codebook.block - 1, 0), np.int64)
    roots = np.exp(2j * np.pi * np.arange(codebook.roots) / codebook.roots)
    table = _word_table(codebook)
    compare_blocks(np.ascontiguousarray(y), roots, codebook.permutations, table, words)
    return words


@lru_cache(maxsize=8)
def _word_table(codebook: DifferentialCodebook) -> NDArray[np.int64]:
    """Word of each permutation and of the columns' turns, digits of a number: (A, M^Nt)."""
    table = np.empty((len(codebook.permutations), codebook.roots**codebook.antennas), np.int64)
    digits = codebook.roots ** np.arange(codebook.antennas - 1, -1, -1)
    table[codebook.set_index, codebook.turns @ digits] = np.arange(codebook.size)
    return table


@kernel
def compare_blocks(y: C64, roots: C128, permutations: I64, table: I64, words: I64) -> None:
    """Best permutation and turns of each block against the one before.

    Args:
        y: complex64 ((n + 1) Nt, Nr).
        roots: complex128 (M,); exp(2 pi j u / M).
        permutations: int64 (A, Nt); row of each column's entry.
        table: int64 (A, M^Nt); word of a permutation and the turns.
        words: int64 (n,); filled.
    """
    antennas, size = permutations.shape[1], roots.size
    score = np.empty((antennas, antennas), np.float64)
    turn = np.empty((antennas, antennas), np.int64)
    for t in range(words.size):
        before, now = t * antennas, (t + 1) * antennas
        for i in range(antennas):
            for j in range(antennas):
                re, im = 0.0, 0.0
                for r in range(y.shape[1]):
                    a, b = y[before + i, r], y[now + j, r]
                    re += a.real * b.real + a.imag * b.imag
                    im += a.real * b.imag - a.imag * b.real
                score[i, j] = -np.inf
                for u in range(size):
                    value = re * roots[u].real + im * roots[u].imag
                    if value > score[i, j]:
                        score[i, j], turn[i, j] = value, u
        best, chosen = -np.inf, 0
        for p in range(permutations.shape[0]):
            total = 0.0
            for j in range(antennas):
                total += score[permutations[p, j], j]
            if total > best:
                best, chosen = total, p
        number = 0
        for j in range(antennas):
            number = number * size + turn[permutations[chosen, j], j]
        words[t] = table[chosen, number]
