"""Known sequences for synchronisation and pilots."""

from __future__ import annotations

from collections.abc import Iterable
from math import gcd

import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError
from spatiq.signal.lfsr import Lfsr

MAX_LENGTH = 1_000_000

# One maximal-length register for each order (tapped stages, see spatiq.signal.lfsr).
DEFAULT_TAPS: dict[int, tuple[int, ...]] = {
    2: (2, 1),
    3: (3, 2),
    4: (4, 3),
    5: (5, 3),
    6: (6, 5),
    7: (7, 6),
    8: (8, 6, 5, 4),
    9: (9, 5),
    10: (10, 7),
    11: (11, 9),
    12: (12, 11, 10, 4),
    13: (13, 12, 11, 8),
    14: (14, 13, 12, 2),
    15: (15, 14),
    16: (16, 15, 13, 4),
}

# Preferred pairs: registers whose outputs have three-valued cross-correlation (Gold, IEEE IT 1967).
PREFERRED_PAIRS: dict[int, tuple[tuple[int, ...], tuple[int, ...]]] = {
    5: ((5, 2), (5, 4, 3, 2)),
    6: ((6, 1), (6, 5, 2, 1)),
    7: ((7, 3), (7, 3, 2, 1)),
    9: ((9, 4), (9, 6, 4, 3)),
    10: ((10, 3), (10, 8, 3, 2)),
    11: ((11, 2), (11, 8, 5, 2)),
}

# 3GPP TS 38.211 clause 5.2.1: x1(n+31) = x1(n+3) + x1(n); x2(n+31) = x2(n+3) + x2(n+2) + x2(n+1)
# + x2(n); the first 1600 outputs are discarded.
GOLD_3GPP_FIRST = Lfsr((31, 28))
GOLD_3GPP_SECOND = Lfsr((31, 30, 29, 28))
GOLD_3GPP_SKIP = 1600


def _signs(bits: NDArray[np.uint8]) -> NDArray[np.float64]:
    """Bit 0 -> +1, bit 1 -> -1."""
    return 1.0 - 2.0 * bits.astype(np.float64)


def m_sequence(
    order: int, taps: Iterable[int] | None = None, state: int | None = None
) -> NDArray[np.float64]:
    """Maximal-length sequence, one period; output bit 0 -> +1, 1 -> -1.

    Args:
        order: stages n of the register, 2 to 16.
        taps: tapped stages, the highest being `order`; None for `DEFAULT_TAPS[order]`.
        state: start, 1 to 2^n - 1, bit i - 1 being stage i; None for all stages 1.

    Returns:
        float64, shape (2^n - 1,).

    Raises:
        InputError: order out of range, taps that give no maximal length, a state that is none.
    """
    if order not in DEFAULT_TAPS:
        raise InputError("m-sequence", "order", order, "2 to 16")
    register = Lfsr(DEFAULT_TAPS[order] if taps is None else tuple(taps))
    if register.order != order:
        raise InputError("m-sequence", "taps", list(register.taps), f"the highest one {order}")
    if not register.is_maximal():
        raise InputError(
            "m-sequence",
            "taps",
            list(register.taps),
            f"taps of a maximal-length register, such as {list(DEFAULT_TAPS[order])}",
        )
    begin = register.all_ones if state is None else state
    if not 1 <= begin <= register.all_ones:
        raise InputError("m-sequence", "state", begin, f"1 to {register.all_ones}")
    return _signs(register.bits(begin, register.all_ones))


def zadoff_chu(length: int, root: int) -> NDArray[np.complex128]:
    """Zadoff-Chu sequence exp(-j pi u n (n + c) / N), c = 1 for odd N and 0 for even N.

    Source: D. C. Chu, "Polyphase codes with good periodic correlation properties", IEEE Trans.
    Inf. Theory 18, 1972.
    Two of one length have flat cross-correlation only if gcd(u - v, N) = 1: prefer prime lengths.

    Args:
        length: N, 2 to 1 000 000.
        root: u, 1 to N - 1, with gcd(u, N) = 1.

    Returns:
        complex128, shape (N,), magnitude 1.

    Raises:
        InputError: a parameter out of range or a root that shares a factor with the length.
    """
    if not 2 <= length <= MAX_LENGTH:
        raise InputError("zadoff-chu", "length", length, f"2 to {MAX_LENGTH}")
    if not 1 <= root < length:
        raise InputError("zadoff-chu", "root", root, f"1 to {length - 1}")
    if gcd(root, length) != 1:
        raise InputError("zadoff-chu", "root", root, f"no common factor with length {length}")
    n = np.arange(length, dtype=np.int64)
    # Whole-number phase modulo one turn (2 N steps) keeps every value accurate to the last digit.
    steps = (n * (n + length % 2) % (2 * length)) * root % (2 * length)
    return np.asarray(np.exp(-1j * np.pi * steps / length), np.complex128)


def gold(order: int, index: int) -> NDArray[np.float64]:
    """Gold sequence, one period; bit 0 -> +1, 1 -> -1.

    With u and v the outputs of the two registers in `PREFERRED_PAIRS[order]`, both begun with all
    stages 1: index 0 is u, index 1 is v, index 2 + i is u(k) + v(k + i) modulo 2, v cyclic.

    Args:
        order: n, one of 5, 6, 7, 9, 10, 11.
        index: 0 to 2^n.

    Returns:
        float64, shape (2^n - 1,).

    Raises:
        InputError: order or index out of range.
    """
    if order not in PREFERRED_PAIRS:
        raise InputError("gold", "order", order, "one of 5, 6, 7, 9, 10, 11")
    length = (1 << order) - 1
    if not 0 <= index <= length + 1:
        raise InputError("gold", "index", index, f"0 to {length + 1}")
    first, second = (Lfsr(taps).bits(length, length) for taps in PREFERRED_PAIRS[order])
    if index < 2:
        return _signs((first, second)[index])
    return _signs(first ^ np.roll(second, -(index - 2)))


def _reversed_word(word: int) -> int:
    """31 bits in the other order: 3GPP numbers x(0) as bit 0, the register as its highest bit."""
    return int(f"{word:031b}"[::-1], 2)


def gold_3gpp(c_init: int, n: int) -> NDArray[np.uint8]:
    """Pseudo-random bits c(0)..c(n-1) of 3GPP TS 38.211 clause 5.2.1.

    Args:
        c_init: start of the second register, 0 to 2^31 - 1.
        n: bits wanted.

    Returns:
        uint8, shape (n,).

    Raises:
        InputError: c_init out of range, or n negative.
    """
    if not 0 <= c_init < 1 << 31:
        raise InputError("gold-3gpp", "c_init", c_init, "0 to 2147483647")
    first = GOLD_3GPP_FIRST.advance(_reversed_word(1), GOLD_3GPP_SKIP)
    second = GOLD_3GPP_SECOND.advance(_reversed_word(c_init), GOLD_3GPP_SKIP)
    return GOLD_3GPP_FIRST.bits(first, n) ^ GOLD_3GPP_SECOND.bits(second, n)
