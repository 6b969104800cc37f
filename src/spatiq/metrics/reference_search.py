"""Where in a running PRBS do received bits lie? Found from the bits themselves.

Any `order` error-free bits fix the register's state, the state its position (a discrete logarithm,
by baby and giant steps: D. Shanks, Proc. Symp. Pure Math. 20, 1971), and the position the frame
number, modulo the sequence's period.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from math import gcd

import numpy as np
import scipy.stats
from numpy.typing import NDArray

from spatiq.signal.prbs import Prbs

_WINDOWS = 64  # tried per frame: one without error is among them at bit error ratios up to 10 %
_LIKELY_WINDOWS = 0.5  # error-free windows to be expected at the error ratio that was found
_BABY_STEPS = 1 << 17
SIGNIFICANCE = 1e-9  # probability that unrelated bits agree as well


def agreement(mismatches: int, compared: int) -> float:
    """Probability that so few mismatches arise by chance among unrelated bits."""
    return float(scipy.stats.binom.cdf(mismatches, compared, 0.5))


@dataclass
class PrbsSearch:
    """Frame numbers of frames that carry `length` bits each of a PRBS that runs on."""

    prbs: Prbs
    length: int
    _states: NDArray[np.int64] = field(init=False)
    _order: NDArray[np.int64] = field(init=False)

    def __post_init__(self) -> None:
        """Tabulate the baby steps: the states at the first positions."""
        count = min(_BABY_STEPS, self.prbs.period)
        states = self.prbs.register.states_at(
            self.prbs.register.all_ones, np.arange(count, dtype=np.int64)
        )
        self._order = np.argsort(states).astype(np.int64)
        self._states = np.asarray(states, dtype=np.int64)[self._order]

    @property
    def modulus(self) -> int:
        """Frames after which the same bits come again."""
        return self.prbs.period // gcd(self.length, self.prbs.period)

    def frame_number(self, bits: NDArray[np.uint8]) -> int | None:
        """Smallest frame number whose reference agrees with bits (length,); None if none."""
        order = self.prbs.order
        last = bits.size - order
        if last < 0 or not self.prbs.supports_state:
            return None
        windows = min(_WINDOWS, last + 1)
        best, fewest = bits[:order], bits.size
        where = 0
        for offset in np.unique(np.linspace(0, last, windows).astype(np.int64)).tolist():
            wrong = self._mismatches(bits, bits[offset : offset + order], offset)
            if wrong < fewest:
                best, fewest, where = bits[offset : offset + order], wrong, offset
            if fewest * order * 4 < bits.size:
                break
        else:
            best, fewest = self._corrected(bits, best, fewest, where)
        # The window agrees by construction: only the other bits are evidence.
        significant = agreement(fewest, bits.size - order) * windows < SIGNIFICANCE
        # A register of two taps with one wrong bit spoils few of the next: a state nearly right
        # agrees better than chance. The right one must have had a window without error.
        free_of_error = windows * (1.0 - fewest / bits.size) ** order
        if not significant or free_of_error < _LIKELY_WINDOWS:
            return None
        start = self.prbs.advance(self.prbs.state_from_bits(best), -where)
        return self._number(self.position(start))

    def _mismatches(self, bits: NDArray[np.uint8], window: NDArray[np.uint8], offset: int) -> int:
        """Bits that differ from the sequence with `window` at `offset`; all when there is none."""
        state = self.prbs.state_from_bits(window)
        if state == 0:
            return int(bits.size)
        expected = self.prbs.bits_from_state(self.prbs.advance(state, -offset), bits.size)
        return int(np.count_nonzero(expected != bits))

    def _corrected(
        self, bits: NDArray[np.uint8], window: NDArray[np.uint8], fewest: int, offset: int
    ) -> tuple[NDArray[np.uint8], int]:
        """Correct the window bit by bit as long as mismatches become fewer."""
        while True:
            flipped = window ^ np.eye(window.size, dtype=np.uint8)
            wrong = [self._mismatches(bits, f, offset) for f in flipped]
            i = int(np.argmin(wrong))
            if wrong[i] >= fewest:
                return window, fewest
            window, fewest = flipped[i], wrong[i]

    def position(self, state: int) -> int:
        """Position in the sequence at which the register holds a state."""
        count = self._states.size
        for giant in range(-(-self.prbs.period // count)):
            i = int(np.searchsorted(self._states, state))
            if i < count and self._states[i] == state:
                return (int(self._order[i]) + giant * count) % self.prbs.period
            state = self.prbs.advance(state, -count)
        raise ValueError(f"state {state} is not one of {self.prbs.name}")

    def _number(self, position: int) -> int | None:
        """Smallest n with n * length = position modulo the period."""
        common = gcd(self.length, self.prbs.period)
        if position % common:
            return None
        inverse = pow(self.length // common, -1, self.modulus)
        return (position // common) * inverse % self.modulus
