"""The codebook: one idea that carries the whole family of index-modulation schemes.

A scheme is an array of C = 2^b transmit vectors, one per word of b bits. The transmitter looks a
word up; the receiver searches for the nearest vector.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError
from spatiq.kernels import kernel
from spatiq.signal.constellations import Constellation

# A confusion matrix is kept for each frame: this many rows and columns are what memory bears.
MAX_SETS = 256
SINGLE = Constellation("single point", np.ones(1, np.complex128))


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
            significant bit of w). In the differential form (`block` > 1): (V, Nt), what a symbol
            period may carry.
        antenna_sets: the active-antenna sets, A tuples of antenna indices, in ascending order.
        set_index: int64, shape (C,); which antenna set word w activates.
        symbol_index: int64, shape (C,); which symbol word w sends: label of the constellation
            point, of all points one behind the other where antennas send their own.
        spatial_bits: bool, shape (b,); True where bit i of the word chooses the antenna set.
        constellation: the points behind `symbol_index`.
        set_names: what the A sets are called in tables, as in "0+3"; two sets of the same antennas
            (quadrature and differential forms) differ in it. Derived when left out.
    """

    scheme: str
    vectors: NDArray[np.complex128]
    antenna_sets: tuple[tuple[int, ...], ...]
    set_index: NDArray[np.int64]
    symbol_index: NDArray[np.int64]
    spatial_bits: NDArray[np.bool_]
    constellation: Constellation
    set_names: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        """Name the sets by their antennas, unless they have names."""
        if not self.set_names:
            names = tuple("+".join(map(str, s)) or "none" for s in self.antenna_sets)
            object.__setattr__(self, "set_names", names)

    @property
    def bits(self) -> int:
        """Bits per word, b."""
        return int(self.spatial_bits.size)

    @property
    def size(self) -> int:
        """Number of words, C."""
        return int(self.set_index.size)

    @property
    def antennas(self) -> int:
        """Number of transmit antennas, Nt."""
        return int(self.vectors.shape[1])

    @property
    def block(self) -> int:
        """Symbol periods that a word takes; more than 1 in the differential form."""
        return 1

    @property
    def single_antenna(self) -> bool:
        """True when each word is one symbol from one antenna."""
        return self.block == 1 and all(len(s) == 1 for s in self.antenna_sets)

    def carried(self, words: NDArray[np.int64]) -> NDArray[np.int64]:
        """Which of `vectors` each symbol period of a run of payload carries.

        Args:
            words: int64, shape (F, n); -1 where unknown.

        Returns:
            int64, shape (F, periods); -1 where unknown.
        """
        return words

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


def spread(values: NDArray[np.int64], positions: Sequence[int], width: int) -> NDArray[np.int64]:
    """Words of `width` bits that hold the bits of `values` (first = most significant) at word
    positions (0 = first bit), and zeros elsewhere."""
    words = np.zeros_like(values)
    for i, position in enumerate(positions):
        bit = (values >> (len(positions) - 1 - i)) & 1
        words |= bit << (width - 1 - position)
    return words


def word_table(values: int, labels: int, spatial_positions: Sequence[int]) -> NDArray[np.int64]:
    """Word of each spatial value and label, shape (values, labels); both are powers of two.

    The label takes the positions that are not spatial, in ascending order.
    """
    width = (values * labels).bit_length() - 1
    chosen = set(spatial_positions)
    signal_positions = [p for p in range(width) if p not in chosen]
    space = spread(np.arange(values), spatial_positions, width)
    signal = spread(np.arange(labels), signal_positions, width)
    return np.asarray(space[:, None] | signal)


def assemble(
    scheme: str,
    patterns: NDArray[np.complex128],
    active: Sequence[tuple[int, ...]],
    constellation: Constellation,
    spatial_positions: Sequence[int],
    names: Sequence[str] = (),
) -> Codebook:
    """A codebook whose spatial bits choose a set and whose other bits choose what it sends.

    Args:
        scheme: registered name.
        patterns: complex128, shape (V, L, Nt); what spatial value v with label l sends.
        active: V tuples; antennas that spatial value v activates. Sets are sorted by them.
        constellation: behind the labels.
        spatial_positions: log2 V positions of the spatial value's bits, most significant first.
        names: of the V sets, where they have names.

    Raises:
        InputError: two words that send the same vector, or more than `MAX_SETS` sets.
    """
    values, labels, antennas = patterns.shape
    if values > MAX_SETS:
        raise InputError("codebook", "", f"{values} antenna sets", f"at most {MAX_SETS}")
    words = word_table(values, labels, spatial_positions)
    order = sorted(range(values), key=lambda v: active[v])
    rank = np.empty(values, np.int64)
    rank[order] = np.arange(values)
    vectors = np.empty((words.size, antennas), np.complex128)
    vectors[words.ravel()] = patterns.reshape(-1, antennas)
    set_index, symbol_index = np.empty((2, words.size), np.int64)
    set_index[words] = rank[:, None]
    symbol_index[words] = np.arange(labels)
    spatial_bits = np.zeros(words.size.bit_length() - 1, np.bool_)
    spatial_bits[list(spatial_positions)] = True
    check_distinct(vectors)
    return Codebook(
        scheme=scheme,
        vectors=vectors,
        antenna_sets=tuple(tuple(sorted(set(active[v]))) for v in order),
        set_index=set_index,
        symbol_index=symbol_index,
        spatial_bits=spatial_bits,
        constellation=constellation,
        set_names=tuple(names[v] for v in order) if names else (),
    )


def check_distinct(vectors: NDArray[np.complex128]) -> None:
    """No receiver tells two words apart that send the same vector (C, Nt).

    Raises:
        InputError: naming the two words.
    """
    rounded = np.round(vectors / max(float(np.abs(vectors).max()), 1e-300), 9) + 0.0
    order = np.lexsort(rounded.view(np.float64).T)
    same = np.flatnonzero((rounded[order[1:]] == rounded[order[:-1]]).all(axis=1))
    if same.size:
        width = vectors.shape[0].bit_length() - 1
        pair = sorted((int(order[same[0]]), int(order[same[0] + 1])))
        first, second = (format(w, f"0{width}b") for w in pair)
        raise InputError(
            "codebook", "", f"words {first} and {second} send the same", "words that all differ"
        )
