"""Known sequences: published values and the correlations that they are chosen for."""

from __future__ import annotations

from collections.abc import Callable
from itertools import combinations
from math import gcd

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from spatiq.errors import InputError
from spatiq.signal.sequences import (
    DEFAULT_TAPS,
    GOLD_3GPP_FIRST,
    PREFERRED_PAIRS,
    gold,
    gold_3gpp,
    m_sequence,
    zadoff_chu,
)


def periodic_correlation(a: np.ndarray, b: np.ndarray) -> np.ndarray:
    """sum over k of conj(a[k]) b[k + lag], for every lag."""
    return np.fft.ifft(np.conj(np.fft.fft(a)) * np.fft.fft(b))


@pytest.mark.nojit
@pytest.mark.parametrize("order", sorted(DEFAULT_TAPS))
def test_m_sequence_autocorrelation(order: int) -> None:
    sequence = m_sequence(order)
    n = 2**order - 1
    assert sequence.shape == (n,)
    assert set(sequence) == {-1.0, 1.0}
    correlation = np.rint(periodic_correlation(sequence, sequence).real)
    assert correlation[0] == n
    assert set(correlation[1:]) == {-1.0}
    assert sequence.sum() == -1  # 2^(n-1) ones, sent as -1


def test_m_sequence_bits_of_a_known_register() -> None:
    # PRBS9 of ITU-T O.150: taps 9 and 5, all-ones start; bit 1 -> -1.
    begins = np.array([int(b) for b in "11111111100000111101111100010111"])
    np.testing.assert_array_equal(m_sequence(9, (9, 5))[:32], 1 - 2 * begins)


def test_state_moves_the_start() -> None:
    whole = m_sequence(5)
    moved = m_sequence(5, state=1)
    shifts = [k for k in range(31) if np.array_equal(np.roll(whole, -k), moved)]
    assert len(shifts) == 1
    assert moved[:5].tolist() == [1, 1, 1, 1, -1]  # digits of state 1 are the first bits


@pytest.mark.parametrize(("order", "peak"), [(5, 9), (6, 17), (7, 17), (9, 33), (10, 65), (11, 65)])
def test_gold_cross_correlation_is_three_valued(order: int, peak: int) -> None:
    # {-1, -t, t-2}, t = 1 + 2^floor((n+2)/2): Gold, IEEE Trans. Inf. Theory 13, 1967 (from memory).
    n = 2**order - 1
    chosen = range(n + 2) if order <= 6 else [0, 1, 2, 3, n // 2, n, n + 1]
    family = [gold(order, i) for i in chosen]
    values: set[float] = set()
    for a, b in combinations(family, 2):
        values |= set(np.rint(periodic_correlation(a, b).real))
    assert values == {-1.0, -float(peak), float(peak - 2)}


def test_gold_peak_of_order_10_in_db() -> None:
    correlation = np.abs(periodic_correlation(gold(10, 0), gold(10, 1)))
    assert 20 * np.log10(correlation.max() / 1023) == pytest.approx(-23.94, abs=5e-3)


@pytest.mark.parametrize("order", sorted(PREFERRED_PAIRS))
def test_gold_index_rule(order: int) -> None:
    first, second = (m_sequence(order, taps) for taps in PREFERRED_PAIRS[order])
    np.testing.assert_array_equal(gold(order, 0), first)
    np.testing.assert_array_equal(gold(order, 1), second)
    n = first.size
    for shift in (0, 1, n - 1):
        expected = first * second[(np.arange(n) + shift) % n]
        np.testing.assert_array_equal(gold(order, 2 + shift), expected)


@pytest.mark.nojit
@pytest.mark.parametrize(
    ("c_init", "begins"),
    [
        # 3GPP TS 38.211 clause 5.2.1; computed by the recursion and by a matrix jump.
        (0, "00000010000110100001001001111010"),
        (1, "00000010100000110000001101110100"),
        (2**31 - 1, "11111101000010111111001110001110"),
    ],
)
def test_gold_3gpp_begins(c_init: int, begins: str) -> None:
    assert "".join(map(str, gold_3gpp(c_init, 32))) == begins


@given(st.integers(0, 2**31 - 1), st.integers(0, 200))
def test_gold_3gpp_equals_the_recursion(c_init: int, n: int) -> None:
    x1, x2 = [1] + [0] * 30, [(c_init >> i) & 1 for i in range(31)]
    for k in range(1600 + n):
        x1.append(x1[k + 3] ^ x1[k])
        x2.append(x2[k + 3] ^ x2[k + 2] ^ x2[k + 1] ^ x2[k])
    expected = [x1[k + 1600] ^ x2[k + 1600] for k in range(n)]
    assert gold_3gpp(c_init, n).tolist() == expected


@pytest.mark.parametrize(
    # Words of x1, bit i = x1(n + i). 0x54D21B24 at 1569 is what public implementations store, since
    # they step 31 bits more; at the standard's Nc = 1600 it is 0x5E485840 (computed).
    ("at", "word"),
    [(0, 1), (1569, 0x54D21B24), (1600, 0x5E485840)],
)
def test_gold_3gpp_first_register_words(at: int, word: int) -> None:
    begin = int(f"{1:031b}"[::-1], 2)
    bits = GOLD_3GPP_FIRST.bits(GOLD_3GPP_FIRST.advance(begin, at), 31)
    assert sum(int(bit) << i for i, bit in enumerate(bits)) == word


@given(st.integers(2, 400), st.data())
def test_zadoff_chu_is_its_formula_with_ideal_autocorrelation(
    length: int, data: st.DataObject
) -> None:
    roots = [u for u in range(1, length) if gcd(u, length) == 1]
    root = data.draw(st.sampled_from(roots))
    sequence = zadoff_chu(length, root)
    n = np.arange(length)
    phase = np.pi * root * n * (n + length % 2) / length
    np.testing.assert_allclose(sequence, np.exp(-1j * phase), atol=1e-9)
    correlation = periodic_correlation(sequence, sequence)
    assert correlation[0].real == pytest.approx(length)
    assert np.abs(correlation[1:]).max() < 1e-10 * length


def test_zadoff_chu_pairs_and_the_common_factor_trap() -> None:
    # Chu, IEEE Trans. Inf. Theory 18, 1972; arXiv:2311.01035: flat at sqrt N only if
    # gcd(u - v, N) = 1. N = 63: roots 25, 29 flat; roots 25, 34 share the factor 9.
    flat = np.abs(periodic_correlation(zadoff_chu(63, 25), zadoff_chu(63, 29)))
    np.testing.assert_allclose(flat, 7.937254, atol=5e-7)
    uneven = np.abs(periodic_correlation(zadoff_chu(63, 25), zadoff_chu(63, 34)))
    assert uneven.min() < 1e-9
    assert uneven.max() == pytest.approx(23.811762, abs=5e-7)


def test_zadoff_chu_peak_moves_with_a_carrier_offset_of_one_bin() -> None:
    # Ambiguity, arXiv:1406.3412: by the inverse of u modulo N; N = 139, u = 5: 28.
    sequence = zadoff_chu(139, 5)
    turned = sequence * np.exp(2j * np.pi * np.arange(139) / 139)
    lag = int(np.abs(periodic_correlation(sequence, turned)).argmax())
    assert pow(5, -1, 139) == 28
    assert lag == 28


def test_zadoff_chu_stays_accurate_at_great_length() -> None:
    # Independent: the same phase in whole numbers of unlimited size.
    length, root = 999_983, 499_979
    sequence = zadoff_chu(length, root)
    for n in (1, 500_000, 999_982):
        turn = (root * n * (n + 1)) % (2 * length) / length
        assert abs(sequence[n] - np.exp(-1j * np.pi * turn)) < 1e-15


@pytest.mark.parametrize(
    ("call", "text"),
    [
        (lambda: m_sequence(1), "order: found 1"),
        (lambda: m_sequence(17), "order: found 17"),
        (lambda: m_sequence(5, (4, 1)), "highest one 5"),
        (lambda: m_sequence(4, (4, 2)), "maximal-length"),
        (lambda: m_sequence(5, state=0), "state: found 0"),
        (lambda: m_sequence(5, state=32), "state: found 32"),
        (lambda: gold(8, 0), "order: found 8"),
        (lambda: gold(5, 33), "index: found 33; expected 0 to 32"),
        (lambda: gold(5, -1), "index: found -1"),
        (lambda: gold_3gpp(2**31, 1), "c_init"),
        (lambda: gold_3gpp(-1, 1), "c_init"),
        (lambda: zadoff_chu(1, 1), "length: found 1"),
        (lambda: zadoff_chu(63, 63), "root: found 63"),
        (lambda: zadoff_chu(63, 21), "common factor with length 63"),
    ],
)
def test_refusals(call: Callable[[], object], text: str) -> None:
    with pytest.raises(InputError, match=text):
        call()
