"""Codebooks: a contract over every scheme, and the published error bounds that labels must meet."""

from __future__ import annotations

from math import comb

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from spatiq.signal.codebooks import (
    Codebook,
    registered,
    space_shift_keying,
    spatial_modulation,
)
from spatiq.signal.constellations import named
from spatiq.signal.scheme_examples import scheme_examples

EXAMPLES = scheme_examples()
CASES = [(scheme, book) for scheme, books in EXAMPLES.items() for book in books]


def test_every_scheme_has_examples() -> None:
    assert set(registered()) == set(EXAMPLES)
    assert all(EXAMPLES.values())


@pytest.mark.nojit
@pytest.mark.parametrize(("scheme", "book"), CASES)
def test_contract_of_every_scheme(scheme: str, book: Codebook) -> None:
    assert book.scheme == scheme
    assert book.size == 1 << book.bits == book.symbol_index.size
    assert book.vectors.shape[1] == book.antennas
    assert np.unique(book.vectors, axis=0).shape[0] == book.vectors.shape[0]
    assert np.mean(np.sum(np.abs(book.vectors) ** 2, axis=1)) == pytest.approx(1.0)
    # A word is its set and its symbol: no two words have both in common.
    assert len(set(zip(book.set_index, book.symbol_index, strict=True))) == book.size
    assert set(book.set_index) == set(range(len(book.antenna_sets)))
    assert len(set(book.set_names)) == len(book.set_names) == len(book.antenna_sets)
    if book.block == 1:
        assert book.vectors.shape[0] == book.size
        for word in range(book.size):
            active = tuple(np.flatnonzero(book.vectors[word]))
            assert active == book.antenna_sets[book.set_index[word]]


@pytest.mark.nojit
@pytest.mark.parametrize(("scheme", "book"), [c for c in CASES if c[0] != "vector-table"])
def test_spatial_bits_choose_the_set_and_the_others_the_symbol(scheme: str, book: Codebook) -> None:
    bits = book.words_to_bits(np.arange(book.size)).reshape(book.size, book.bits)
    space: dict[tuple[int, ...], set[int]] = {tuple(row[book.spatial_bits]): set() for row in bits}
    signal: dict[tuple[int, ...], set[int]] = {
        tuple(row[~book.spatial_bits]): set() for row in bits
    }
    for row, chosen, symbol in zip(bits, book.set_index, book.symbol_index, strict=True):
        space[tuple(row[book.spatial_bits])].add(int(chosen))
        signal[tuple(row[~book.spatial_bits])].add(int(symbol))
    assert sorted(map(len, space.values())) == [1] * len(book.antenna_sets)
    assert sorted(map(len, signal.values())) == [1] * (1 << int((~book.spatial_bits).sum()))


@pytest.mark.nojit
@pytest.mark.parametrize("book", EXAMPLES["spatial-modulation"] + EXAMPLES["space-shift-keying"])
def test_a_lone_antenna_sends_the_point_of_the_label(book: Codebook) -> None:
    for word in range(book.size):
        (antenna,) = book.antenna_sets[book.set_index[word]]
        symbol = book.constellation.points[book.symbol_index[word]]
        assert book.vectors[word, antenna] == symbol


def test_placing_of_bits_and_antennas() -> None:
    last = spatial_modulation(4, named("QPSK"), [2, 0, 3, 1], [2, 3])
    # Word b0 b1 b2 b3 = 10 01: QPSK label 10, spatial value 01 -> antenna 0.
    word = last.vectors[0b1001]
    assert np.flatnonzero(word).tolist() == [0]
    assert word[0] == named("QPSK").points[0b10]
    # Spatial value's most significant bit at position 3, the other at 0; label from 1 and 2.
    split = spatial_modulation(4, named("QPSK"), [0, 1, 2, 3], [3, 0])
    word = split.vectors[0b1010]
    assert np.flatnonzero(word).tolist() == [0b01]
    assert word[1] == named("QPSK").points[0b01]


@given(st.sampled_from(CASES), st.lists(st.integers(0, 2**20), max_size=12), st.integers(1, 3))
def test_words_and_bits_round_trip(
    case: tuple[str, Codebook], numbers: list[int], frames: int
) -> None:
    book = case[1]
    words = np.tile(np.array(numbers, np.int64) % book.size, (frames, 1))
    bits = book.words_to_bits(words)
    assert bits.shape == (frames, len(numbers) * book.bits)
    text = "".join(format(w, f"0{book.bits}b") for w in words[0])
    assert "".join(map(str, bits[0])) == text
    np.testing.assert_array_equal(book.bits_to_words(bits), words)


def pairwise_error(branches: int, gamma: np.ndarray) -> np.ndarray:
    """Mean of Q(sqrt(2 sum of L exponential branches)): Proakis (14.4-15) (from memory)."""
    mu = 0.5 * (1 - np.sqrt(gamma / (1 + gamma)))
    terms = [comb(branches - 1 + k, k) * (1 - mu) ** k for k in range(branches)]
    return np.asarray(mu**branches * np.sum(terms, axis=0))


def union_bound(book: Codebook, receivers: int, snr_db: float) -> float:
    """Bit-error union bound, i.i.d. Rayleigh: mean over words of Hamming distance times PEP."""
    x = book.vectors
    distance = np.sum(np.abs(x[:, None] - x) ** 2, axis=2)
    words = np.arange(book.size)
    wrong = np.bitwise_count(words[:, None] ^ words)
    error = pairwise_error(receivers, 10 ** (snr_db / 10) * distance / 4)
    return float(np.sum(wrong * error) / book.size / book.bits)


@pytest.mark.parametrize(
    # Computed from Jeganathan, Ghrayeb, Szczecinski, IEEE Commun. Lett. 12(8), 2008 (formula from
    # memory) by finite sum and by Craig's integral; antenna bits above the symbol's, Gray labels.
    ("antennas", "name", "snr_db", "bound"),
    [
        (2, "BPSK", 10, 9.091921e-3),
        (2, "BPSK", 15, 1.104568e-3),
        (2, "QPSK", 10, 1.949356e-2),
        (2, "QPSK", 15, 2.375479e-3),
        (4, "BPSK", 8, 1.890698e-3),
        (4, "BPSK", 10, 4.188801e-4),
        (4, "QPSK", 10, 8.550369e-4),
        (4, "QPSK", 12, 1.703103e-4),
        (4, "16QAM", 12, 7.801041e-3),
        (4, "16QAM", 15, 9.899866e-4),
    ],
)
def test_labels_meet_the_union_bound(antennas: int, name: str, snr_db: float, bound: float) -> None:
    spatial = list(range(antennas.bit_length() - 1))
    book = spatial_modulation(antennas, named(name), list(range(antennas)), spatial)
    assert union_bound(book, antennas, snr_db) == pytest.approx(bound, rel=1e-6)


def test_space_shift_keying_meets_its_union_bound() -> None:
    # (Nt/2) G(Nr, rho/2), Nt = Nr = 4 at 10 dB: Jeganathan et al., IEEE J. Lightw. Technol. 27,
    # 2009 (from memory).
    book = space_shift_keying(4, [0, 1, 2, 3], [0, 1])
    assert union_bound(book, 4, 10) == pytest.approx(2.267167e-4, rel=1e-6)
