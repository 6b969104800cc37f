"""The codebook: one idea that carries the whole family of index-modulation schemes.

A scheme is an array of C = 2^b transmit vectors, one per word of b bits. The transmitter looks a
word up; the receiver searches for the nearest vector. To add a scheme: write a function that
returns a `Codebook` and enter it in `SCHEMES`; the contract suite in tests/ then runs over it.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spatiq.kernels import kernel
from spatiq.signal.constellations import Constellation


@kernel
def unpack_words(words: NDArray[np.int64], bits: NDArray[np.uint8]) -> None:
    """Bits of each word (n,), first bit the most significant, into bits uint8 (n, b)."""
    width = bits.shape[1]
    for i in range(words.size):
        for j in range(width):
            bits[i, j] = (words[i] >> (width - 1 - j)) & 1


@dataclass(frozen=True, eq=False)
class Codebook:
    """Transmit vectors indexed by the word of bits that selects them.

    Attributes:
        scheme: name under which the scheme is registered.
        vectors: complex128, shape (C, Nt); `vectors[w]` is sent for word w (first bit = most
            significant bit of w).
        antenna_sets: the active-antenna sets, A tuples of antenna indices, ascending.
        set_index: int64, shape (C,); which antenna set word w activates.
        symbol_index: int64, shape (C,); which constellation point word w sends.
        spatial_bits: bool, shape (b,); True where bit i of the word chooses the antenna set.
        constellation: the points behind `symbol_index`.
    """

    scheme: str
    vectors: NDArray[np.complex128]
    antenna_sets: tuple[tuple[int, ...], ...]
    set_index: NDArray[np.int64]
    symbol_index: NDArray[np.int64]
    spatial_bits: NDArray[np.bool_]
    constellation: Constellation

    @property
    def bits(self) -> int:
        """Bits per word, b."""
        return int(self.spatial_bits.size)

    @property
    def size(self) -> int:
        """Number of transmit vectors, C."""
        return int(self.vectors.shape[0])

    @property
    def antennas(self) -> int:
        """Number of transmit antennas, Nt."""
        return int(self.vectors.shape[1])

    def words_to_bits(self, words: NDArray[np.int64]) -> NDArray[np.uint8]:
        """Words, shape (..., n) -> bits, shape (..., n*b), first bit of a word first."""
        given = np.ascontiguousarray(words, np.int64)
        bits = np.empty((*given.shape, self.bits), np.uint8)
        unpack_words(given.ravel(), bits.reshape(given.size, self.bits))
        return bits.reshape(*given.shape[:-1], given.shape[-1] * self.bits)

    def bits_to_words(self, bits: NDArray[np.uint8]) -> NDArray[np.int64]:
        """Bits, shape (..., n*b) -> words, shape (..., n).

        Raises:
            ValueError: when the number of bits is no multiple of b.
        """
        shape = (*bits.shape[:-1], bits.shape[-1] // self.bits, self.bits)
        grouped = np.asarray(bits).reshape(shape).astype(np.int64)
        weights = 1 << np.arange(self.bits - 1, -1, -1)
        return np.asarray(grouped @ weights, dtype=np.int64)


def _spread(value: int, positions: Sequence[int], width: int) -> int:
    """Place the bits of `value` (first = most significant) at word positions (0 = first bit)."""
    word = 0
    for i, position in enumerate(positions):
        bit = (value >> (len(positions) - 1 - i)) & 1
        word |= bit << (width - 1 - position)
    return word


def spatial_modulation(
    antennas: int,
    constellation: Constellation,
    antenna_order: Sequence[int],
    spatial_positions: Sequence[int],
) -> Codebook:
    """One active antenna per symbol period; antenna and symbol carry bits.

    Method: R. Mesleh et al., "Spatial modulation", IEEE Trans. Veh. Technol. 57(4), 2008.

    Args:
        antennas: Nt, number of transmit antennas.
        constellation: M points indexed by label.
        antenna_order: 2^k antenna indices; entry v is the antenna that spatial value v selects.
        spatial_positions: k positions in the word (0 = first bit) that carry the spatial value, its
            most significant bit first; the symbol's label takes the remaining positions in order.
    """
    n_spatial = len(spatial_positions)
    width = n_spatial + constellation.bits
    signal_positions = [p for p in range(width) if p not in set(spatial_positions)]
    size = 1 << width
    vectors = np.zeros((size, antennas), np.complex128)
    set_index = np.zeros(size, np.int64)
    symbol_index = np.zeros(size, np.int64)
    used = sorted(antenna_order)
    for value, antenna in enumerate(antenna_order):
        for label in range(constellation.size):
            word = _spread(value, spatial_positions, width)
            word |= _spread(label, signal_positions, width)
            vectors[word, antenna] = constellation.points[label]
            set_index[word] = used.index(antenna)
            symbol_index[word] = label
    spatial_bits = np.zeros(width, np.bool_)
    spatial_bits[list(spatial_positions)] = True
    return Codebook(
        scheme="spatial-modulation" if constellation.bits else "space-shift-keying",
        vectors=vectors,
        antenna_sets=tuple((int(a),) for a in used),
        set_index=set_index,
        symbol_index=symbol_index,
        spatial_bits=spatial_bits,
        constellation=constellation,
    )


def space_shift_keying(
    antennas: int, antenna_order: Sequence[int], spatial_positions: Sequence[int]
) -> Codebook:
    """Only the antenna carries bits; every antenna sends the symbol 1.

    Method: J. Jeganathan et al., "Space shift keying modulation for MIMO channels", IEEE J. Lightw.
    Technol. 27, 2009.
    """
    single = Constellation("single point", np.ones(1, np.complex128))
    return spatial_modulation(antennas, single, antenna_order, spatial_positions)


SCHEMES: dict[str, Callable[..., Codebook]] = {
    "spatial-modulation": spatial_modulation,
    "space-shift-keying": space_shift_keying,
}


def registered() -> dict[str, Callable[..., Any]]:
    """All schemes by name."""
    return dict(SCHEMES)
