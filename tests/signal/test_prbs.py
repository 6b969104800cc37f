"""Pseudo-random bit sequences against ITU-T O.150 (05/96), clause 5."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from spatiq.errors import InputError
from spatiq.signal.prbs import NAMES, prbs

# ITU-T O.150 clause 5.1 to 5.8: order, taps, inverted, longest run of zeros. PRBS7 is not in it:
# common practice, no source.
TABLE = {
    "PRBS7": (7, (7, 6), False, 6),
    "PRBS9": (9, (9, 5), False, 8),
    "PRBS11": (11, (11, 9), False, 10),
    "PRBS15": (15, (15, 14), True, 15),
    "PRBS20": (20, (20, 3), False, 19),
    "PRBS20-zs": (20, (20, 17), False, 14),
    "PRBS23": (23, (23, 18), True, 23),
    "PRBS29": (29, (29, 27), True, 29),
    "PRBS31": (31, (31, 28), True, 31),
}
SHORT = [name for name in NAMES if TABLE[name][0] <= 23]
LINEAR = [name for name in NAMES if name != "PRBS20-zs"]


def longest_zeros(bits: np.ndarray) -> int:
    """Longest cyclic run of zeros."""
    ones = np.flatnonzero(bits)
    return int(np.diff(np.append(ones, ones[0] + bits.size)).max()) - 1


def stepped(name: str, n: int) -> list[int]:
    """Oracle: the register bit by bit, then the output rule of the clause."""
    order, taps, inverted, _ = TABLE[name]
    raw = [1] * order
    while len(raw) < n + 14:
        raw.append(sum(raw[-t] for t in taps) % 2)
    if name == "PRBS20-zs":
        return [1 if not any(raw[k + 1 : k + 15]) else raw[k] for k in range(n)]
    return [bit ^ inverted for bit in raw[:n]]


def test_every_sequence_is_checked() -> None:
    assert set(NAMES) == set(TABLE)


@pytest.mark.nojit
@pytest.mark.parametrize("name", NAMES)
def test_definition_and_beginning(name: str) -> None:
    order, taps, inverted, _ = TABLE[name]
    sequence = prbs(name)
    assert (sequence.order, sequence.register.taps, sequence.inverted) == (order, taps, inverted)
    assert sequence.period == 2**order - 1
    assert sequence.bits(0, 300).tolist() == stepped(name, 300)


@pytest.mark.nojit
def test_published_beginnings() -> None:
    # Computed from the clauses by two independent means, all-ones start, last stage out.
    nine = "".join(map(str, prbs("PRBS9").bits(0, 32)))
    fifteen = "".join(map(str, prbs("PRBS15").bits(0, 32)))
    assert nine == "11111111100000111101111100010111"
    assert fifteen == "00000000000000011111111111111011"


@pytest.mark.parametrize("name", SHORT)
def test_whole_period_ones_and_longest_zeros(name: str) -> None:
    order, _, inverted, zeros = TABLE[name]
    sequence = prbs(name)
    bits = sequence.bits(0, sequence.period)
    ones = 2 ** (order - 1)
    if inverted:
        ones = sequence.period - ones
    if name == "PRBS20-zs":
        ones += 2**5 - 1  # forced: every window of 15 zeros, which leaves 5 free bits, not all 0
    assert bits.sum() == ones
    assert longest_zeros(bits) == zeros
    np.testing.assert_array_equal(
        sequence.bits(sequence.period, 500), bits[np.arange(500) % bits.size]
    )


def test_zero_suppression_equals_the_rule_over_a_period() -> None:
    sequence = prbs("PRBS20-zs")
    raw = sequence.register.bits(sequence.period, sequence.period + 14)
    quiet = np.lib.stride_tricks.sliding_window_view(raw[1:], 14).max(axis=1) == 0
    np.testing.assert_array_equal(sequence.bits(0, sequence.period), raw[:-14] | quiet)


@pytest.mark.parametrize("name", ["PRBS29", "PRBS31"])
def test_long_ones_are_maximal_with_their_longest_run_at_the_start(name: str) -> None:
    order, _, _, zeros = TABLE[name]
    sequence = prbs(name)
    assert sequence.register.is_maximal()
    around = sequence.bits(sequence.period - 1, order + 2)
    assert around.tolist() == [1] + [0] * zeros + [1]


@pytest.mark.parametrize("name", NAMES)
@given(start=st.integers(0, 2**63 - 1), n=st.integers(0, 300), gap=st.integers(0, 300))
def test_any_stretch_is_part_of_one_sequence(name: str, start: int, n: int, gap: int) -> None:
    sequence = prbs(name)
    whole = sequence.bits(start, gap + n)
    if start + gap < 2**63:
        np.testing.assert_array_equal(sequence.bits(start + gap, n), whole[gap:])
    np.testing.assert_array_equal(sequence.bits(start % sequence.period, gap + n), whole)
    state = sequence.state_at(start)
    np.testing.assert_array_equal(sequence.bits_from_state(state, gap + n), whole)
    assert sequence.advance(sequence.advance(state, gap), -gap) == state


@pytest.mark.parametrize("name", SHORT)
def test_jumped_stretches_equal_stepping(name: str) -> None:
    sequence = prbs(name)
    whole = np.array(stepped(name, 60_000))
    starts = np.random.default_rng(3).integers(0, 59_000, 40)
    rows = sequence.bits_at(starts, 777)
    for start, row in zip(starts, rows, strict=True):
        np.testing.assert_array_equal(row, whole[start : start + 777])


@pytest.mark.nojit
@pytest.mark.parametrize("name", LINEAR)
@pytest.mark.parametrize("inverted", [None, False, True])
def test_a_window_gives_the_state(name: str, inverted: bool | None) -> None:
    sequence = prbs(name, inverted)
    assert sequence.supports_state
    for start in (0, 1, 77, 10**12 + 5):
        window = sequence.bits(start, sequence.order)
        state = sequence.state_from_bits(window)
        assert state == sequence.state_at(start)
        np.testing.assert_array_equal(
            sequence.bits_from_state(state, 200), sequence.bits(start, 200)
        )


@pytest.mark.parametrize("name", NAMES)
def test_inversion_complements(name: str) -> None:
    straight, inverted = prbs(name, False), prbs(name, True)
    np.testing.assert_array_equal(straight.bits(123, 999) ^ 1, inverted.bits(123, 999))


def test_a_window_outside_the_sequence_gives_state_zero() -> None:
    assert prbs("PRBS9").state_from_bits([0] * 9) == 0
    assert prbs("PRBS15").state_from_bits([1] * 15) == 0


def test_refusals() -> None:
    with pytest.raises(InputError, match=r"found 'PRBS8'; expected one of PRBS7"):
        prbs("PRBS8")
    suppressed = prbs("PRBS20-zs")
    assert not suppressed.supports_state
    with pytest.raises(InputError, match="zero-suppressed"):
        suppressed.state_from_bits([1] * 20)
    nine = prbs("PRBS9")
    with pytest.raises(InputError, match="9 bits"):
        nine.state_from_bits([1] * 8)
    with pytest.raises(InputError, match="9 bits"):
        nine.state_from_bits([2] * 9)
    with pytest.raises(InputError, match="start: found -1"):
        nine.bits(-1, 4)
    with pytest.raises(InputError, match="start"):
        nine.bits(2**63, 4)
    with pytest.raises(InputError, match="number of bits"):
        nine.bits(0, -1)
