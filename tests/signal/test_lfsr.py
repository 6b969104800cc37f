"""Shift registers: kernels against a register stepped bit by bit."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from spatiq.errors import InputError
from spatiq.signal.lfsr import Lfsr

registers = st.lists(st.integers(1, 62), min_size=1, max_size=6, unique=True).map(
    lambda taps: Lfsr(tuple(taps))
)


def step(register: Lfsr, state: int, n: int) -> tuple[list[int], int]:
    """Oracle: stages as a list, one step at a time. Returns outputs and the state after."""
    stages = [(state >> i) & 1 for i in range(register.order)]
    out = []
    for _ in range(n):
        out.append(stages[-1])
        stages = [sum(stages[t - 1] for t in register.taps) % 2, *stages[:-1]]
    return out, sum(bit << i for i, bit in enumerate(stages))


@st.composite
def started(draw: st.DrawFn) -> tuple[Lfsr, int]:
    register = draw(registers)
    return register, draw(st.integers(0, register.all_ones))


@pytest.mark.nojit
@given(started(), st.integers(0, 200))
def test_bits_and_jump_equal_stepping(start: tuple[Lfsr, int], n: int) -> None:
    register, state = start
    out, after = step(register, state, n)
    assert register.bits(state, n).tolist() == out
    assert register.advance(state, n) == after
    assert register.advance(after, -n) == state


@given(started(), st.integers(-(2**63) + 1, 2**63 - 1), st.integers(-(2**40), 2**40))
def test_jumps_add_up(start: tuple[Lfsr, int], far: int, near: int) -> None:
    register, state = start
    there = register.advance(state, far)
    assert register.advance(there, -far) == state
    if abs(far + near) < 2**63:
        assert register.advance(there, near) == register.advance(state, far + near)


@given(started(), st.lists(st.integers(0, 2**63 - 1), max_size=5))
def test_many_jumps_equal_single_ones(start: tuple[Lfsr, int], steps: list[int]) -> None:
    register, state = start
    moved = register.states_at(state, np.array(steps, np.int64))
    assert moved.tolist() == [register.advance(state, n) for n in steps]
    rows = register.bits_of(moved, 70)
    assert rows.shape == (len(steps), 70)
    for row, one in zip(rows, moved, strict=True):
        assert row.tolist() == register.bits(int(one), 70).tolist()


@given(started())
def test_state_reads_as_the_next_bits(start: tuple[Lfsr, int]) -> None:
    register, state = start
    digits = "".join(map(str, register.bits(state, register.order)))
    assert int(digits, 2) == state


@pytest.mark.nojit
@pytest.mark.parametrize("order", range(2, 9))
def test_is_maximal_equals_counting(order: int) -> None:
    found = 0
    for inner in range(1 << (order - 1)):
        taps = (order, *(i + 1 for i in range(order - 1) if inner >> i & 1))
        register = Lfsr(taps)
        state, n = register.advance(1, 1), 1
        while state != 1:
            state, n = step(register, state, 1)[1], n + 1
        assert register.is_maximal() == (n == register.all_ones)
        found += register.is_maximal()
    # Number of primitive polynomials of degree n over GF(2): phi(2^n - 1)/n.
    assert found == {2: 1, 3: 2, 4: 2, 5: 6, 6: 6, 7: 18, 8: 16}[order]


@pytest.mark.parametrize("taps", [(), (0,), (63,), (5, 5), (7, -1)])
def test_taps_out_of_range_are_refused(taps: tuple[int, ...]) -> None:
    with pytest.raises(InputError, match="taps"):
        Lfsr(taps)


def test_arguments_out_of_range_are_refused() -> None:
    register = Lfsr((7, 6))
    with pytest.raises(InputError, match="state: found 128"):
        register.bits(128, 1)
    with pytest.raises(InputError, match="number of bits: found -1"):
        register.bits(1, -1)
    with pytest.raises(InputError, match="2\\^63"):
        register.advance(1, 2**63)
    with pytest.raises(InputError, match="steps: found -1"):
        register.states_at(1, np.array([-1]))
    with pytest.raises(InputError, match="32 stages"):
        Lfsr((40, 1)).is_maximal()
