"""The differential form: words are carried by the change from one block of Nt periods to the next.

A block is an Nt x Nt matrix S_t, columns sent one after the other. Each column has one entry that
is not zero, so that one antenna at a time is active. S_t = S_{t-1} X_t: the word chooses X_t, a
permutation matrix whose entries are M-th roots of unity. The receiver gets Y_t = H S_t + noise =
Y_{t-1} X_t + noise, and needs no channel.

Method: Y. Bian, X. Cheng, M. Wen, L. Yang, H. V. Poor, B. Jiao, "Differential spatial modulation",
IEEE Trans. Veh. Technol. 64(7), 2015; M. Wen et al., IEEE Commun. Lett. 18(3), 2014 (two antennas);
both from memory.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import islice, permutations
from math import factorial

import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError
from spatiq.signal.codebook import MAX_SETS, Codebook, word_table
from spatiq.signal.constellations import Constellation


@dataclass(frozen=True, eq=False, kw_only=True)
class DifferentialCodebook(Codebook):
    """Words as changes of a block.

    Attributes:
        vectors: complex128, shape (Nt * M, Nt); what one period may carry: row a * M + u is the
            root exp(2 pi j u / M) from antenna a.
        permutations: int64, shape (A, Nt); of permutation p, column j has its entry in row
            `permutations[p, j]`.
        turns: int64, shape (C, Nt); the entry of column j of word w is exp(2 pi j turns[w, j] / M).
    """

    permutations: NDArray[np.int64]
    turns: NDArray[np.int64]

    @property
    def block(self) -> int:
        """Symbol periods that a word takes, Nt."""
        return self.antennas

    @property
    def roots(self) -> int:
        """M, number of phases."""
        return int(self.vectors.shape[0]) // self.antennas

    def matrices(self) -> NDArray[np.complex128]:
        """X of every word, complex128, shape (C, Nt, Nt)."""
        columns = np.arange(self.antennas)
        x = np.zeros((self.size, self.antennas, self.antennas), np.complex128)
        rows = self.permutations[self.set_index]
        x[np.arange(self.size)[:, None], rows, columns] = self.vectors[self.turns, 0]
        return x

    def carried(self, words: NDArray[np.int64]) -> NDArray[np.int64]:
        """Which of `vectors` each period carries: the reference block, then a block a word.

        Args:
            words: int64, shape (F, n); -1 where unknown.

        Returns:
            int64, shape (F, (n + 1) * Nt); -1 from an unknown word on: what follows builds on it.
        """
        frames, count = words.shape
        sent = np.empty((frames, count + 1, self.antennas), np.int64)
        antenna = np.tile(np.arange(self.antennas), (frames, 1))
        turn = np.zeros_like(antenna)
        sent[:, 0] = antenna * self.roots
        known = np.ones((frames, 1), np.bool_)
        for n in range(count):
            word = words[:, n]
            known &= (word >= 0)[:, None]
            rows = self.permutations[self.set_index[word]]
            antenna = np.take_along_axis(antenna, rows, axis=1)
            turn = (np.take_along_axis(turn, rows, axis=1) + self.turns[word]) % self.roots
            sent[:, n + 1] = np.where(known, antenna * self.roots + turn, -1)
        return sent.reshape(frames, -1)


def first_permutations(antennas: int) -> list[tuple[int, ...]]:
    """The stated rule: of all permutations, in lexicographic order, the first 2^k.

    2^k is the largest power of two not above Nt! nor above `MAX_SETS`.
    """
    count = min(1 << (factorial(antennas).bit_length() - 1), MAX_SETS)
    return list(islice(permutations(range(antennas)), count))


def _turns(constellation: Constellation) -> NDArray[np.int64]:
    """Phase of each label over that of label 0...0, in M-th parts of a turn.

    Raises:
        InputError: points that are no M-PSK; only these stay among themselves when multiplied.
    """
    points, size = constellation.points, constellation.size
    ratio = points / points[0] if points[0] != 0 else points * np.nan
    place = np.angle(ratio) * size / (2 * np.pi)
    turns = np.where(np.isfinite(place), np.rint(place), 0).astype(np.int64) % size
    exact = np.exp(2j * np.pi * turns / size)
    if np.unique(turns).size != size or not np.allclose(ratio, exact, atol=1e-9):
        raise InputError(
            "codebook", "constellation", constellation.name, "phase-shift keying, such as QPSK"
        )
    return turns


def differential_spatial_modulation(
    antennas: int,
    constellation: Constellation,
    antenna_permutations: Sequence[Sequence[int]],
    spatial_positions: Sequence[int],
) -> DifferentialCodebook:
    """Words of Nt periods: a permutation and Nt symbols, differentially encoded.

    Args:
        antennas: Nt.
        constellation: M-PSK; what counts is each point's phase over that of label 0...0.
        antenna_permutations: 2^k permutations of 0..Nt-1; entry v is the one that spatial value v
            selects. Column j of X has its entry in row `antenna_permutations[v][j]`.
        spatial_positions: k positions in the word for v; the Nt labels take the others, that of
            column 0 first.

    Raises:
        InputError: a constellation that is no M-PSK, too many permutations.
    """
    if antennas < 2:
        raise InputError("codebook", "", f"{antennas} antenna", "at least 2 in differential form")
    turn_of = _turns(constellation)
    size, count = constellation.size, len(antenna_permutations)
    if count > MAX_SETS:
        raise InputError("codebook", "permutations", f"{count} permutations", f"at most {MAX_SETS}")
    labels = np.arange(size**antennas)
    words = word_table(count, labels.size, spatial_positions)
    order = sorted(range(count), key=lambda v: tuple(antenna_permutations[v]))
    rank = np.empty(count, np.int64)
    rank[order] = np.arange(count)
    set_index, symbol_index = np.empty((2, words.size), np.int64)
    set_index[words] = rank[:, None]
    symbol_index[words] = labels
    shifts = constellation.bits * np.arange(antennas - 1, -1, -1)
    turns = turn_of[(symbol_index[:, None] >> shifts) & (size - 1)]
    spatial_bits = np.zeros(words.size.bit_length() - 1, np.bool_)
    spatial_bits[list(spatial_positions)] = True
    root = np.exp(2j * np.pi * np.arange(size) / size)
    return DifferentialCodebook(
        scheme="differential-spatial-modulation",
        vectors=np.kron(np.eye(antennas), root[:, None]),
        antenna_sets=(tuple(range(antennas)),) * count,
        set_index=set_index,
        symbol_index=symbol_index,
        spatial_bits=spatial_bits,
        constellation=constellation,
        set_names=tuple("-".join(map(str, antenna_permutations[v])) for v in order),
        permutations=np.array([antenna_permutations[v] for v in order], np.int64),
        turns=turns,
    )
