"""Sample types of the SigMF standard: how a complex sample lies in the file and what 1.0 is.

How to add one: an entry in `_COMPONENTS`; the tests run over all of `COMPLEX_DATATYPES`.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass

import numpy as np

from spatiq.errors import InputError
from spatiq.recording.inputs import shown

# Component format -> NumPy kind and width; one-byte formats have no byte order.
_COMPONENTS = {
    "f64": "f8",
    "f32": "f4",
    "i32": "i4",
    "i16": "i2",
    "u32": "u4",
    "u16": "u2",
    "i8": "i1",
    "u8": "u1",
}
_ORDERS = {"_le": "<", "_be": ">"}


def _names(letter: str) -> tuple[str, ...]:
    names: list[str] = []
    for component, code in _COMPONENTS.items():
        one_byte = code.endswith("1")
        names += [letter + component] if one_byte else [letter + component + o for o in _ORDERS]
    return tuple(names)


COMPLEX_DATATYPES = _names("c")
_REAL_DATATYPES = _names("r")


@dataclass(frozen=True)
class SampleType:
    """A complex datatype.

    Attributes:
        name: as in core:datatype.
        stored: NumPy type of one component as it lies in the file.
        full_scale: component value (after removal of the unsigned offset) that becomes 1.0.
    """

    name: str
    stored: np.dtype[np.generic]
    full_scale: float

    @property
    def native(self) -> np.dtype[np.generic]:
        """The component type in this machine's byte order."""
        return self.stored.newbyteorder("=")

    @property
    def swapped(self) -> bool:
        """True when bytes must be swapped on this machine."""
        return self.stored != self.native

    @property
    def is_integer(self) -> bool:
        """True for integer components: only these have a range whose ends can be counted."""
        return self.stored.kind in "iu"

    @property
    def sample_bytes(self) -> int:
        """Bytes of one complex sample of one channel."""
        return 2 * self.stored.itemsize

    @property
    def offset(self) -> int:
        """What zero is stored as; mid-range if unsigned: a convention, not the standard."""
        return 1 << (8 * self.stored.itemsize - 1) if self.stored.kind == "u" else 0

    @property
    def range_ends(self) -> tuple[int, int]:
        """Stored component values at or beyond which a sample counts as clipped (integers only).

        The ends of the type's range; with a smaller full scale F set by the user, the ends of the
        converter's range: -F and F-1 when F is a power of two, else -F and F.
        """
        bits = 8 * self.stored.itemsize
        first = self.offset - (1 << (bits - 1))
        scale = self.full_scale
        top = scale - 1 if math.frexp(scale)[0] == 0.5 else scale
        low = max(first, self.offset - math.ceil(scale))
        return low, min(first + (1 << bits) - 1, self.offset + math.ceil(top))


def parse_datatype(value: object, source: str, full_scale: float | None = None) -> SampleType:
    """Check core:datatype to the letter.

    Args:
        value: the field's value.
        source: file name for messages.
        full_scale: value of a component that is to become 1.0; None: 2^(bits-1) for integers, 1 for
            floats (which stay as they are).

    Raises:
        InputError: not a datatype of the standard, real samples, or a full scale of no use.
    """
    field = "global.core:datatype"
    if value in _REAL_DATATYPES:
        raise InputError(source, field, f"real samples ({value})", "complex samples (c...)")
    if not isinstance(value, str) or value not in COMPLEX_DATATYPES:
        hint = ""
        if isinstance(value, str) and re.fullmatch("c[fiu](64|32|16)", value):
            hint = " (byte order is missing)"
        accepted = ", ".join(COMPLEX_DATATYPES)
        raise InputError(source, field, shown(value) + hint, f"one of {accepted}")
    component, order = (value[1:-3], value[-3:]) if "_" in value else (value[1:], "")
    stored = np.dtype(_ORDERS.get(order, "|") + _COMPONENTS[component])
    if full_scale is None:
        bits = 8 * stored.itemsize
        scale = 1.0 if stored.kind == "f" else 2.0 ** (bits - 1)
    else:
        scale = check_full_scale(full_scale)
    return SampleType(value, stored, scale)


def check_full_scale(full_scale: float) -> float:
    """Full scale as a finite positive number whose reciprocal is a normal single-precision number.

    Raises:
        InputError: anything else.
    """
    good = isinstance(full_scale, int | float) and not isinstance(full_scale, bool)
    if not good or not 1e-30 <= full_scale <= 1e30:
        raise InputError("full scale", "", shown(full_scale), "a number 1e-30..1e+30")
    return float(full_scale)
