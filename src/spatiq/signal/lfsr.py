"""Linear feedback shift registers: fast bits, and jumps of any length in either direction.

One convention for the whole package. A register has stages 1..n. Each step its output is stage n,
the modulo-2 sum of the tapped stages is fed to stage 1, everything else moves up one stage. So the
output obeys a[k] = sum over taps t of a[k - t]. A state is a whole number whose bit i - 1 is stage
i; written as n binary digits it reads, first digit first, as the next n output bits.

Jumps multiply by powers of the step matrix over GF(2) (its columns kept as whole numbers).
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError
from spatiq.kernels import kernel

MAX_ORDER = 62
MAX_MAXIMAL_ORDER = 32
JUMP_BITS = 63


@kernel
def register_bits(
    states: NDArray[np.int64], taps: NDArray[np.int64], order: int, n: int
) -> NDArray[np.uint8]:
    """Output bits of registers, one row each.

    Args:
        states: int64, shape (F,), contiguous.
        taps: int64, shape (T,), stages 1..order.
        order: stages of the register.
        n: bits wanted of each.

    Returns:
        uint8, shape (F, n).
    """
    bits = np.empty((states.size, n), np.uint8)
    for row in range(states.size):
        state = states[row]
        for k in range(min(order, n)):
            bits[row, k] = (state >> (order - 1 - k)) & 1
        for k in range(order, n):
            total = np.uint8(0)
            for i in range(taps.size):
                total ^= bits[row, k - taps[i]]
            bits[row, k] = total
    return bits


@kernel
def apply_columns(columns: NDArray[np.int64], state: np.int64) -> np.int64:
    """GF(2) matrix, int64 columns of shape (order,), times a state."""
    total = np.int64(0)
    for i in range(columns.size):
        total ^= columns[i] * ((state >> i) & 1)
    return total


@kernel
def jump(
    states: NDArray[np.int64], steps: NDArray[np.int64], powers: NDArray[np.int64]
) -> NDArray[np.int64]:
    """Advance states, int64 (F,), by steps, int64 (F,) >= 0, with powers[j] = step matrix^(2^j).

    `powers` is int64, shape (63, order). Returns int64, shape (F,).
    """
    moved = states.copy()
    for row in range(moved.size):
        left = steps[row]
        j = 0
        while left > 0:
            if left & 1:
                moved[row] = apply_columns(powers[j], moved[row])
            left >>= 1
            j += 1
    return moved


def _prime_factors(number: int) -> list[int]:
    factors: list[int] = []
    divisor = 2
    while divisor * divisor <= number:
        if number % divisor == 0:
            factors.append(divisor)
            while number % divisor == 0:
                number //= divisor
        divisor += 1
    return factors + ([number] if number > 1 else [])


@lru_cache(maxsize=64)
def _powers(taps: tuple[int, ...], backwards: bool) -> NDArray[np.int64]:
    """Columns of step matrix^(2^j), j = 0..62: int64, shape (63, order)."""
    order = taps[0]
    top = 1 << (order - 1)
    mask = sum(1 << (t - 1) for t in taps)
    columns = []
    for i in range(order):
        unit = 1 << i
        if not backwards:
            fed = (unit & mask).bit_count() & 1
            columns.append(((unit << 1) & (2 * top - 1)) | fed)
        else:
            # Stage 1 holds what was fed; what left stage n is that minus the other tapped stages.
            lost = (unit & 1) ^ (((unit >> 1) & mask).bit_count() & 1)
            columns.append((unit >> 1) | (lost * top))
    powers = np.empty((JUMP_BITS, order), np.int64)
    powers[0] = columns
    for j in range(1, JUMP_BITS):
        powers[j] = [apply_columns(powers[j - 1], column) for column in powers[j - 1]]
    return powers


def _checked_taps(taps: Iterable[int]) -> tuple[int, ...]:
    given = tuple(int(t) for t in taps)
    ordered = tuple(sorted(set(given), reverse=True))
    if not ordered or len(ordered) != len(given) or ordered[-1] < 1 or ordered[0] > MAX_ORDER:
        raise InputError(
            "shift register", "taps", list(given), f"stages 1 to {MAX_ORDER}, once each"
        )
    return ordered


@dataclass(frozen=True)
class Lfsr:
    """A register by its tapped stages; the highest tap is its last stage, n.

    Raises:
        InputError: no taps, a tap out of 1..62, or one given twice.
    """

    taps: tuple[int, ...]
    _taps_array: NDArray[np.int64] = field(init=False, repr=False, compare=False)

    def __post_init__(self) -> None:
        """Check and order the taps, highest first."""
        taps = _checked_taps(self.taps)
        object.__setattr__(self, "taps", taps)
        object.__setattr__(self, "_taps_array", np.array(taps, np.int64))

    @property
    def order(self) -> int:
        """Number of stages, n."""
        return self.taps[0]

    @property
    def all_ones(self) -> int:
        """The state in which every stage holds 1."""
        return (1 << self.order) - 1

    def check_state(self, state: int) -> int:
        """The state itself. Raises InputError when it does not fit the register."""
        if not 0 <= state <= self.all_ones:
            raise InputError("shift register", "state", state, f"0 to {self.all_ones}")
        return int(state)

    def bits(self, state: int, n: int) -> NDArray[np.uint8]:
        """The next n output bits: uint8, shape (n,)."""
        one = np.array([self.check_state(state)], np.int64)
        return self.bits_of(one, n).reshape(-1)

    def bits_of(self, states: NDArray[np.int64], n: int) -> NDArray[np.uint8]:
        """The next n output bits of each state, int64 (F,): uint8, shape (F, n)."""
        if n < 0:
            raise InputError("shift register", "number of bits", n, "0 or more")
        bits: NDArray[np.uint8] = register_bits(
            np.ascontiguousarray(states, np.int64), self._taps_array, self.order, int(n)
        )
        return bits

    def advance(self, state: int, steps: int) -> int:
        """State after `steps` steps, |steps| < 2^63; negative goes back."""
        if not abs(steps) < 1 << JUMP_BITS:
            raise InputError("shift register", "steps", steps, "less than 2^63 either way")
        one = np.array([self.check_state(state)], np.int64)
        distance = np.array([abs(steps)], np.int64)
        return int(jump(one, distance, _powers(self.taps, steps < 0))[0])

    def states_at(self, state: int, steps: NDArray[np.int64]) -> NDArray[np.int64]:
        """States after each of `steps`, int64 (F,) >= 0: int64, shape (F,)."""
        steps = np.ascontiguousarray(steps, np.int64)
        if steps.size and int(steps.min()) < 0:
            raise InputError("shift register", "steps", int(steps.min()), "0 or more")
        states = np.full(steps.shape, self.check_state(state), np.int64)
        moved: NDArray[np.int64] = jump(states, steps, _powers(self.taps, False))
        return moved

    def is_maximal(self) -> bool:
        """True when every non-zero state lies on one cycle of 2^n - 1 steps, n <= 32.

        The step matrix must have the multiplicative order 2^n - 1: its power is the identity there
        and at no quotient of it by a prime factor.
        """
        if self.order > MAX_MAXIMAL_ORDER:
            raise InputError(
                "shift register", "taps", list(self.taps), f"at most {MAX_MAXIMAL_ORDER} stages"
            )
        period = self.all_ones

        def returns(steps: int) -> bool:
            return all(self.advance(1 << i, steps) == 1 << i for i in range(self.order))

        return returns(period) and not any(returns(period // p) for p in _prime_factors(period))
