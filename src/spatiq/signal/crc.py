"""Cyclic redundancy checks over bits as they are sent.

Parameters follow the usual model: a register of `width` bits starts at `init`; data bits enter most
significant first, or each byte least significant first where `refin`; the register is mirrored
where `refout`, then XORed with `xorout`. Bytes are eight bits in the order sent, the first the most
significant.

To add one: enter it in `_ENTRIES`, and its check value in tests/signal/test_crc.py.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from spatiq.errors import InputError
from spatiq.kernels import kernel

MAX_WIDTH = 64


@kernel
def registers(
    bits: NDArray[np.uint8], width: int, poly: np.int64, init: np.int64, refin: bool
) -> NDArray[np.uint8]:
    """Register after each row of bits.

    Args:
        bits: uint8 0/1, shape (F, n), contiguous; n a multiple of 8 where `refin`.
        width: 1 to 64.
        poly: int64, the generator without its leading term; for 64 bits in two's complement.
        init: int64, likewise.
        refin: enter each group of eight bits last bit first.

    Returns:
        uint8, shape (F, width), the most significant register bit first.
    """
    result = np.empty((bits.shape[0], width), np.uint8)
    for row in range(bits.shape[0]):
        register = init
        for k in range(bits.shape[1]):
            place = k ^ 7 if refin else k
            top = ((register >> (width - 1)) & 1) ^ np.int64(bits[row, place])
            # No branch: its outcome would be as random as the bits.
            register = (register << 1) ^ (poly & -top)
        for i in range(width):
            result[row, i] = (register >> (width - 1 - i)) & 1
    return result


def _signed(value: int) -> np.int64:
    """The 64-bit pattern of an unsigned whole number."""
    return np.int64(value - (1 << 64) if value >= 1 << 63 else value)


@dataclass(frozen=True)
class Crc:
    """One CRC by its parameters.

    Attributes:
        name: name in the catalogue, or "explicit".
        width: check bits, 1 to 64.
        poly: generator polynomial without its leading term, the highest power most significant.
        init: register at the start.
        refin: each byte enters least significant bit first.
        refout: the register is mirrored before it is sent.
        xorout: XORed on the register as sent.

    Raises:
        InputError: width out of range, or a parameter that does not fit it.
    """

    name: str
    width: int
    poly: int
    init: int
    refin: bool
    refout: bool
    xorout: int

    def __post_init__(self) -> None:
        """Refuse parameters that do not fit the width."""
        if not 1 <= self.width <= MAX_WIDTH:
            raise InputError("crc", "width", self.width, f"1 to {MAX_WIDTH}")
        for name in ("poly", "init", "xorout"):
            value = getattr(self, name)
            if not 0 <= value < 1 << self.width:
                raise InputError("crc", name, value, f"0 to 2^{self.width} - 1")

    def compute(self, bits: ArrayLike) -> NDArray[np.uint8]:
        """Check bits of each frame.

        Args:
            bits: uint8 0/1, shape (F, n); whole bytes (n a multiple of 8) where `refin`.

        Returns:
            uint8, shape (F, width): as sent, the most significant bit of the final value first.

        Raises:
            InputError: not two-dimensional, or not whole bytes where `refin`.
        """
        frames = np.ascontiguousarray(bits, np.uint8)
        if frames.ndim != 2:
            raise InputError(self.name, "bits", f"shape {frames.shape}", "frames by bits, (F, n)")
        if self.refin and frames.shape[1] % 8:
            raise InputError(
                self.name, "bits", f"{frames.shape[1]} bits", "whole bytes, as refin mirrors bytes"
            )
        result: NDArray[np.uint8] = registers(
            frames, self.width, _signed(self.poly), _signed(self.init), self.refin
        )
        if self.refout:
            result = result[:, ::-1]
        mask = [(self.xorout >> (self.width - 1 - i)) & 1 for i in range(self.width)]
        return np.ascontiguousarray(result ^ np.array(mask, np.uint8))


_ENTRIES = (
    Crc("CRC-8/SMBUS", 8, 0x07, 0x00, False, False, 0x00),
    Crc("CRC-8/31-REFLECTED", 8, 0x31, 0x00, True, True, 0x00),
    Crc("CRC-8/AUTOSAR", 8, 0x2F, 0xFF, False, False, 0xFF),
    Crc("CRC-8/3GPP", 8, 0x9B, 0x00, False, False, 0x00),
    Crc("CRC-16/3GPP", 16, 0x1021, 0x0000, False, False, 0x0000),
    Crc("CRC-16/1021-FFFF", 16, 0x1021, 0xFFFF, False, False, 0x0000),
    Crc("CRC-16/V.41-LSB", 16, 0x1021, 0x0000, True, True, 0x0000),
    Crc("CRC-16/X.25", 16, 0x1021, 0xFFFF, True, True, 0xFFFF),
    Crc("CRC-16/EPC", 16, 0x1021, 0xFFFF, False, False, 0xFFFF),
    Crc("CRC-16/8005-REFLECTED", 16, 0x8005, 0x0000, True, True, 0x0000),
    Crc("CRC-16/MODBUS", 16, 0x8005, 0xFFFF, True, True, 0x0000),
    Crc("CRC-24/3GPP-A", 24, 0x864CFB, 0x000000, False, False, 0x000000),
    Crc("CRC-24/3GPP-B", 24, 0x800063, 0x000000, False, False, 0x000000),
    Crc("CRC-24/3GPP-C", 24, 0xB2B117, 0x000000, False, False, 0x000000),
    Crc("CRC-24/OPENPGP", 24, 0x864CFB, 0xB704CE, False, False, 0x000000),
    Crc("CRC-24/BLE", 24, 0x00065B, 0x555555, True, True, 0x000000),
    Crc("CRC-32", 32, 0x04C11DB7, 0xFFFFFFFF, True, True, 0xFFFFFFFF),
    Crc("CRC-32/AAL5", 32, 0x04C11DB7, 0xFFFFFFFF, False, False, 0xFFFFFFFF),
    Crc("CRC-32/MPEG-2", 32, 0x04C11DB7, 0xFFFFFFFF, False, False, 0x00000000),
    Crc("CRC-32C", 32, 0x1EDC6F41, 0xFFFFFFFF, True, True, 0xFFFFFFFF),
)
CATALOGUE: dict[str, Crc] = {entry.name: entry for entry in _ENTRIES}


def named(name: str) -> Crc:
    """A CRC of the catalogue. Raises InputError for an unknown name."""
    if name not in CATALOGUE:
        raise InputError("crc", "name", repr(name), "one of " + ", ".join(CATALOGUE))
    return CATALOGUE[name]
