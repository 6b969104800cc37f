"""CRC check values, and the kernel against long division."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from spatiq.errors import InputError
from spatiq.signal.crc import CATALOGUE, Crc, named

# Value for the nine ASCII characters "123456789": public catalogues of CRC parameters, each
# confirmed by a shift register and by long division.
CHECK_VALUES = {
    "CRC-8/SMBUS": 0xF4,
    "CRC-8/31-REFLECTED": 0xA1,
    "CRC-8/AUTOSAR": 0xDF,
    "CRC-8/3GPP": 0xEA,
    "CRC-16/3GPP": 0x31C3,
    "CRC-16/1021-FFFF": 0x29B1,
    "CRC-16/V.41-LSB": 0x2189,
    "CRC-16/X.25": 0x906E,
    "CRC-16/EPC": 0xD64E,
    "CRC-16/8005-REFLECTED": 0xBB3D,
    "CRC-16/MODBUS": 0x4B37,
    "CRC-24/3GPP-A": 0xCDE703,
    "CRC-24/3GPP-B": 0x23EF52,
    "CRC-24/3GPP-C": 0xF48279,
    "CRC-24/OPENPGP": 0x21CF02,
    "CRC-24/BLE": 0xC25A56,
    "CRC-32": 0xCBF43926,
    "CRC-32/AAL5": 0xFC891918,
    "CRC-32/MPEG-2": 0x0376E6E7,
    "CRC-32C": 0xE3069283,
}
DIGITS = np.unpackbits(np.frombuffer(b"123456789", np.uint8))


def as_number(bits: np.ndarray) -> int:
    return int("".join(map(str, bits)), 2)


def mirrored(value: int, width: int) -> int:
    return int(f"{value:0{width}b}"[::-1], 2)


def divided(crc: Crc, bits: list[int]) -> int:
    """Oracle: remainder of (message and init) x^width by the generator, as whole polynomials."""
    if crc.refin:
        bits = [b for k in range(0, len(bits), 8) for b in reversed(bits[k : k + 8])]
    n, generator = len(bits), (1 << crc.width) | crc.poly
    value = int("0" + "".join(map(str, bits)), 2) << crc.width
    value ^= crc.init << n
    for k in range(n - 1, -1, -1):
        if value >> (k + crc.width) & 1:
            value ^= generator << k
    return (mirrored(value, crc.width) if crc.refout else value) ^ crc.xorout


@pytest.mark.nojit
@pytest.mark.parametrize("name", sorted(CATALOGUE))
def test_check_value(name: str) -> None:
    assert as_number(named(name).compute(DIGITS[None])[0]) == CHECK_VALUES[name]


@st.composite
def crcs(draw: st.DrawFn) -> Crc:
    width = draw(st.integers(1, 64))
    number = st.integers(0, 2**width - 1)
    return Crc(
        "explicit", width, draw(number), draw(number), draw(st.booleans()), draw(st.booleans()),
        draw(number),
    )  # fmt: skip


@given(crcs(), st.integers(0, 3), st.integers(0, 20), st.integers(0, 7), st.integers(0, 2**32))
def test_kernel_equals_long_division(
    crc: Crc, frames: int, octets: int, extra: int, seed: int
) -> None:
    n = 8 * octets + (0 if crc.refin else extra)
    bits = np.random.default_rng(seed).integers(0, 2, (frames, n), np.uint8)
    result = crc.compute(bits)
    assert result.shape == (frames, crc.width)
    for row, sent in zip(bits, result, strict=True):
        assert as_number(sent) == divided(crc, row.tolist())


def test_frames_are_independent() -> None:
    bits = np.random.default_rng(1).integers(0, 2, (5, 96), np.uint8)
    crc = named("CRC-32")
    together = crc.compute(bits)
    for row, sent in zip(bits, together, strict=True):
        np.testing.assert_array_equal(crc.compute(row[None])[0], sent)


@pytest.mark.parametrize("name", sorted(CATALOGUE))
def test_any_single_error_is_caught(name: str) -> None:
    crc = named(name)
    wrong = DIGITS ^ np.eye(DIGITS.size, dtype=np.uint8)
    assert (crc.compute(wrong) != crc.compute(DIGITS[None])).any(axis=1).all()


@pytest.mark.parametrize(
    ("call", "text"),
    [
        (lambda: named("CRC-16"), "found 'CRC-16'"),
        (lambda: Crc("explicit", 65, 1, 0, False, False, 0), "width: found 65"),
        (lambda: Crc("explicit", 0, 0, 0, False, False, 0), "width: found 0"),
        (lambda: Crc("explicit", 8, 256, 0, False, False, 0), "poly: found 256"),
        (lambda: Crc("explicit", 8, 7, -1, False, False, 0), "init: found -1"),
        (lambda: Crc("explicit", 8, 7, 0, False, False, 256), "xorout: found 256"),
        (lambda: named("CRC-32").compute(DIGITS[None, :-1]), "found 71 bits; expected whole bytes"),
        (lambda: named("CRC-32").compute(DIGITS), r"\(F, n\)"),
    ],
)
def test_refusals(call: Callable[[], object], text: str) -> None:
    with pytest.raises(InputError, match=text):
        call()
