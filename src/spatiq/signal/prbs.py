"""Pseudo-random bit sequences of ITU-T O.150, any stretch of them without stepping from the start.

Source: ITU-T Recommendation O.150 (05/96), clause 5. PRBS7 is not in it: common practice.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import ArrayLike, NDArray

from spatiq.errors import InputError
from spatiq.kernels import kernel
from spatiq.signal.lfsr import Lfsr

MAX_START = 1 << 63
# O.150 clause 5.5: a bit is forced to 1 when the next 14 bits of the register's output are all 0.
ZERO_RUN = 14


@dataclass(frozen=True)
class _Definition:
    taps: tuple[int, ...]
    inverted: bool
    suppressed: bool = False


_DEFINITIONS: dict[str, _Definition] = {
    "PRBS7": _Definition((7, 6), False),
    "PRBS9": _Definition((9, 5), False),
    "PRBS11": _Definition((11, 9), False),
    "PRBS15": _Definition((15, 14), True),
    "PRBS20": _Definition((20, 3), False),
    "PRBS20-zs": _Definition((20, 17), False, suppressed=True),
    "PRBS23": _Definition((23, 18), True),
    "PRBS29": _Definition((29, 27), True),
    "PRBS31": _Definition((31, 28), True),
}
NAMES = tuple(_DEFINITIONS)


@kernel
def suppress_zeros(raw: NDArray[np.uint8], run: int) -> NDArray[np.uint8]:
    """Force a bit to 1 when the next `run` bits are all 0.

    Args:
        raw: uint8, shape (F, n + run), contiguous; the last `run` columns only look ahead.
        run: bits looked ahead.

    Returns:
        uint8, shape (F, n).
    """
    n = raw.shape[1] - run
    bits = np.empty((raw.shape[0], n), np.uint8)
    for row in range(raw.shape[0]):
        zeros = 0  # length of the run of zeros that begins after bit k
        for k in range(raw.shape[1] - 1, -1, -1):
            if k < n:
                bits[row, k] = np.uint8(1) if zeros >= run else raw[row, k]
            zeros = zeros + 1 if raw[row, k] == 0 else 0
    return bits


@dataclass(frozen=True)
class Prbs:
    """One sequence: a maximal-length register, perhaps inverted or zero-suppressed at its output.

    States follow `spatiq.signal.lfsr`: n binary digits that read as the register's next n output
    bits, before inversion. State 0 belongs to no sequence.

    Attributes:
        name: as in `NAMES`.
        register: the shift register.
        inverted: True when the output is complemented.
        suppressed: True when long runs of zeros are broken up (O.150 clause 5.5), before inversion.
    """

    name: str
    register: Lfsr
    inverted: bool
    suppressed: bool = field(default=False)

    @property
    def order(self) -> int:
        """Stages of the register, n."""
        return self.register.order

    @property
    def period(self) -> int:
        """Bits until the sequence repeats, 2^n - 1."""
        return self.register.all_ones

    @property
    def supports_state(self) -> bool:
        """True when n consecutive output bits give the register's state."""
        return not self.suppressed

    def _output(self, states: NDArray[np.int64], n: int) -> NDArray[np.uint8]:
        if self.suppressed:
            raw = self.register.bits_of(states, n + ZERO_RUN)
            bits: NDArray[np.uint8] = suppress_zeros(raw, ZERO_RUN)
        else:
            bits = self.register.bits_of(states, n)
        return bits ^ np.uint8(1) if self.inverted else bits

    def bits(self, start: int, n: int) -> NDArray[np.uint8]:
        """Bits start..start+n-1 of the output begun with all stages 1: uint8, shape (n,).

        Raises:
            InputError: start outside 0..2^63-1, or n negative.
        """
        return self.bits_from_state(self.state_at(start), n)

    def bits_at(self, starts: ArrayLike, n: int) -> NDArray[np.uint8]:
        """`bits` for many starts, int64 (F,), at once: uint8, shape (F, n)."""
        states = self.register.states_at(self.period, np.asarray(starts, np.int64))
        return self._output(states, n)

    def bits_from_state(self, state: int, n: int) -> NDArray[np.uint8]:
        """The next n output bits from a register state: uint8, shape (n,)."""
        one = np.array([self.register.check_state(state)], np.int64)
        return self._output(one, n).reshape(-1)

    def state_at(self, start: int) -> int:
        """Register state from which bit `start` is the next output bit, 0 <= start < 2^63."""
        if not 0 <= start < MAX_START:
            raise InputError(self.name, "start", start, "0 to 2^63 - 1")
        return self.register.advance(self.period, int(start) % self.period)

    def advance(self, state: int, n: int) -> int:
        """State n steps on from `state`; n may be negative."""
        return self.register.advance(state, n)

    def state_from_bits(self, window: ArrayLike) -> int:
        """Register state that produces these n consecutive output bits, first bit first.

        Args:
            window: 0/1, shape (order,).

        Returns:
            The state; 0 when the bits lie on no such sequence (all of them the suppressed value).

        Raises:
            InputError: a zero-suppressed sequence, a wrong number of bits, or values not 0 or 1.
        """
        if self.suppressed:
            raise InputError(
                self.name, "", "a zero-suppressed sequence", "one with a linear output"
            )
        bits = np.asarray(window)
        if bits.shape != (self.order,) or not np.isin(bits, (0, 1)).all():
            raise InputError(self.name, "window", f"shape {bits.shape}", f"{self.order} bits")
        digits = "".join(str(int(b) ^ int(self.inverted)) for b in bits)
        return int(digits, 2)


def prbs(name: str, inverted: bool | None = None) -> Prbs:
    """A sequence by name.

    Args:
        name: one of `NAMES`.
        inverted: None as the Recommendation says; True or False overrides it.

    Raises:
        InputError: unknown name.
    """
    if name not in _DEFINITIONS:
        raise InputError("prbs", "name", repr(name), "one of " + ", ".join(NAMES))
    known = _DEFINITIONS[name]
    return Prbs(
        name=name,
        register=Lfsr(known.taps),
        inverted=known.inverted if inverted is None else bool(inverted),
        suppressed=known.suppressed,
    )
