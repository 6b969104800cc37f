"""Scramblers: whiten the bits sent, begun afresh in every frame (every row)."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Protocol

import numpy as np
from numpy.typing import ArrayLike, NDArray

from spatiq.errors import InputError
from spatiq.kernels import kernel
from spatiq.signal.lfsr import Lfsr
from spatiq.signal.sequences import gold_3gpp


class Scrambler(Protocol):
    """What every scrambler offers; bits are uint8 0/1, shape (F, n), in and out."""

    def scramble(self, bits: ArrayLike) -> NDArray[np.uint8]:
        """Plain bits -> bits as sent."""

    def descramble(self, bits: ArrayLike) -> NDArray[np.uint8]:
        """Bits as received -> plain bits."""


def _frames(bits: ArrayLike) -> NDArray[np.uint8]:
    frames = np.ascontiguousarray(bits, np.uint8)
    if frames.ndim != 2:
        raise InputError("scrambler", "bits", f"shape {frames.shape}", "frames by bits, (F, n)")
    return frames


@dataclass(frozen=True)
class AdditiveScrambler:
    """Frame-synchronous: bits XORed with what a shift register feeds back.

    Each step the modulo-2 sum of the tapped stages is the scrambling bit and enters stage 1: the
    scrambler of IEEE 802.11 clause 17.3.5.5 is taps (7, 4).

    Attributes:
        taps: tapped stages, the highest being the last.
        seed: register at the start of each frame, bit i - 1 being stage i; not 0.

    Raises:
        InputError: unusable taps, or a seed that is 0 or does not fit.
    """

    taps: tuple[int, ...]
    seed: int
    _register: Lfsr = field(init=False, repr=False, compare=False)

    def __post_init__(self) -> None:
        """Check taps and seed."""
        register = Lfsr(tuple(self.taps))
        if not 1 <= self.seed <= register.all_ones:
            raise InputError("scrambler", "seed", self.seed, f"1 to {register.all_ones}")
        object.__setattr__(self, "taps", register.taps)
        object.__setattr__(self, "_register", register)

    def sequence(self, n: int) -> NDArray[np.uint8]:
        """The first n scrambling bits: uint8, shape (n,)."""
        # What is fed back now leaves the last stage `order` steps later.
        return self._register.bits(self.seed, n + self._register.order)[self._register.order :]

    def scramble(self, bits: ArrayLike) -> NDArray[np.uint8]:
        """Plain bits (F, n) -> bits as sent (F, n)."""
        frames = _frames(bits)
        return frames ^ self.sequence(frames.shape[1])

    def descramble(self, bits: ArrayLike) -> NDArray[np.uint8]:
        """Bits as received (F, n) -> plain bits (F, n)."""
        return self.scramble(bits)


@dataclass(frozen=True)
class GoldScrambler:
    """Frame-synchronous: bits XORed with c(0), c(1), ... of 3GPP TS 38.211 clause 5.2.1.

    Raises:
        InputError: c_init outside 0..2^31-1.
    """

    c_init: int

    def __post_init__(self) -> None:
        """Check c_init."""
        gold_3gpp(self.c_init, 0)

    def sequence(self, n: int) -> NDArray[np.uint8]:
        """The first n scrambling bits: uint8, shape (n,)."""
        return gold_3gpp(self.c_init, n)

    def scramble(self, bits: ArrayLike) -> NDArray[np.uint8]:
        """Plain bits (F, n) -> bits as sent (F, n)."""
        frames = _frames(bits)
        return frames ^ self.sequence(frames.shape[1])

    def descramble(self, bits: ArrayLike) -> NDArray[np.uint8]:
        """Bits as received (F, n) -> plain bits (F, n)."""
        return self.scramble(bits)


@kernel
def multiply(
    bits: NDArray[np.uint8], taps: NDArray[np.int64], state: np.int64, feed_output: bool
) -> NDArray[np.uint8]:
    """Self-synchronising (de)scrambling of rows.

    Args:
        bits: uint8 0/1, shape (F, n), contiguous.
        taps: int64, shape (T,), delays in bits, the first the longest.
        state: int64; bit i - 1 is the bit sent i places before the frame.
        feed_output: True scrambles (the register holds output bits), False descrambles (input).

    Returns:
        uint8, shape (F, n).
    """
    result = np.empty_like(bits)
    sent = result if feed_output else bits
    for row in range(bits.shape[0]):
        for k in range(bits.shape[1]):
            total = bits[row, k]
            for i in range(taps.size):
                delay = taps[i]
                if delay <= k:
                    total ^= sent[row, k - delay]
                else:
                    total ^= np.uint8((state >> (delay - k - 1)) & 1)
            result[row, k] = total
    return result


@dataclass(frozen=True)
class SelfSynchronisingScrambler:
    """Multiplicative: each bit sent is the plain bit plus the bits sent `taps` places before.

    A wrong bit received spoils itself and one plain bit more for every tap.

    Attributes:
        taps: delays in bits.
        state: bits taken as sent before each frame; bit i - 1 is the one i places before it.

    Raises:
        InputError: unusable taps, or a state that does not fit.
    """

    taps: tuple[int, ...]
    state: int = 0

    def __post_init__(self) -> None:
        """Check taps and state."""
        register = Lfsr(tuple(self.taps))
        register.check_state(self.state)
        object.__setattr__(self, "taps", register.taps)

    def _pass(self, bits: ArrayLike, feed_output: bool) -> NDArray[np.uint8]:
        taps = np.array(self.taps, np.int64)
        result: NDArray[np.uint8] = multiply(_frames(bits), taps, np.int64(self.state), feed_output)
        return result

    def scramble(self, bits: ArrayLike) -> NDArray[np.uint8]:
        """Plain bits (F, n) -> bits as sent (F, n)."""
        return self._pass(bits, True)

    def descramble(self, bits: ArrayLike) -> NDArray[np.uint8]:
        """Bits as received (F, n) -> plain bits (F, n)."""
        return self._pass(bits, False)
