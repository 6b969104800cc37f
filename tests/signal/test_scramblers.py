"""Scramblers: published sequences, round trips, error spreading."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from spatiq.errors import InputError
from spatiq.signal.scramblers import (
    AdditiveScrambler,
    GoldScrambler,
    Scrambler,
    SelfSynchronisingScrambler,
)
from spatiq.signal.sequences import gold_3gpp

# IEEE 802.11 clause 17.3.5.5, x^7 + x^4 + 1, all-ones seed (from memory; computed equal).
SEQUENCE_80211 = (
    "0000111011110010110010010000001000100110001011101011011000001100"
    "110101001110011110110100001010101111101001010001101110001111111"
)


@pytest.mark.nojit
def test_80211_sequence() -> None:
    scrambler = AdditiveScrambler((7, 4), 0b1111111)
    assert "".join(map(str, scrambler.sequence(127))) == SEQUENCE_80211
    np.testing.assert_array_equal(scrambler.sequence(254)[127:], scrambler.sequence(127))


@given(st.integers(1, 127), st.integers(0, 300))
def test_additive_sequence_equals_stepping(seed: int, n: int) -> None:
    stages = [(seed >> i) & 1 for i in range(7)]
    expected = []
    for _ in range(n):
        fed = stages[6] ^ stages[3]
        expected.append(fed)
        stages = [fed, *stages[:-1]]
    assert AdditiveScrambler((4, 7), seed).sequence(n).tolist() == expected


@given(st.integers(0, 2**31 - 1), st.integers(0, 100))
def test_gold_scrambler_adds_the_3gpp_sequence(c_init: int, n: int) -> None:
    plain = np.zeros((2, n), np.uint8)
    sent = GoldScrambler(c_init).scramble(plain)
    np.testing.assert_array_equal(sent, np.broadcast_to(gold_3gpp(c_init, n), (2, n)))


@st.composite
def scramblers(draw: st.DrawFn) -> Scrambler:
    taps = tuple(draw(st.lists(st.integers(1, 60), min_size=1, max_size=4, unique=True)))
    state = draw(st.integers(1, 2 ** max(taps) - 1))
    choices: list[Scrambler] = [
        AdditiveScrambler(taps, state),
        SelfSynchronisingScrambler(taps, state),
        SelfSynchronisingScrambler(taps),
        GoldScrambler(state % 2**31),
    ]
    return draw(st.sampled_from(choices))


@pytest.mark.nojit
@given(scramblers(), st.integers(0, 4), st.integers(0, 200), st.integers(0, 2**32))
def test_round_trip_and_independent_frames(
    scrambler: Scrambler, frames: int, n: int, seed: int
) -> None:
    plain = np.random.default_rng(seed).integers(0, 2, (frames, n), np.uint8)
    sent = scrambler.scramble(plain)
    assert sent.dtype == np.uint8
    assert sent.shape == plain.shape
    np.testing.assert_array_equal(scrambler.descramble(sent), plain)
    for row, alone in zip(plain, sent, strict=True):
        np.testing.assert_array_equal(scrambler.scramble(row[None])[0], alone)


@given(
    st.lists(st.integers(1, 60), min_size=1, max_size=4, unique=True),
    st.integers(0, 2**60 - 1),
    st.integers(0, 200),
    st.integers(0, 2**32),
)
def test_self_synchronising_equals_its_recursion(
    taps: list[int], state: int, n: int, seed: int
) -> None:
    state %= 2 ** max(taps)
    plain = np.random.default_rng(seed).integers(0, 2, n, np.uint8).tolist()
    sent = [(state >> i) & 1 for i in reversed(range(max(taps)))]  # oldest first
    for bit in plain:
        sent.append((bit + sum(sent[-t] for t in taps)) % 2)
    scrambler = SelfSynchronisingScrambler(tuple(taps), state)
    result = scrambler.scramble(np.array([plain], np.uint8).reshape(1, n))
    assert result[0].tolist() == sent[max(taps) :]


def test_self_synchronising_recovers_from_a_wrong_start_and_spreads_an_error() -> None:
    # Taps of ITU-T V.22 (from memory). One wrong bit received gives 1 + number of taps wrong bits.
    taps = (17, 14)
    plain = np.random.default_rng(5).integers(0, 2, (1, 400), np.uint8)
    sent = SelfSynchronisingScrambler(taps, 0x1ABCD).scramble(plain)
    late = SelfSynchronisingScrambler(taps).descramble(sent)
    np.testing.assert_array_equal(late[:, 17:], plain[:, 17:])
    assert (late[:, :17] != plain[:, :17]).any()
    sent[0, 200] ^= 1
    wrong = np.flatnonzero(SelfSynchronisingScrambler(taps, 0x1ABCD).descramble(sent) != plain)
    assert wrong.tolist() == [200, 214, 217]


@pytest.mark.parametrize(
    ("call", "text"),
    [
        (lambda: AdditiveScrambler((7, 4), 0), "seed: found 0; expected 1 to 127"),
        (lambda: AdditiveScrambler((7, 4), 128), "seed: found 128"),
        (lambda: AdditiveScrambler((), 1), "taps"),
        (lambda: GoldScrambler(2**31), "c_init"),
        (lambda: SelfSynchronisingScrambler((64,)), "taps"),
        (lambda: SelfSynchronisingScrambler((3, 2), 8), "state: found 8"),
        (lambda: GoldScrambler(1).scramble(np.zeros(4, np.uint8)), r"\(F, n\)"),
    ],
)
def test_refusals(call: Callable[[], object], text: str) -> None:
    with pytest.raises(InputError, match=text):
        call()
