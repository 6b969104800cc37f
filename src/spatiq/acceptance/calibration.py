"""Complex gain of each receive channel, so that the receiver's own is not laid to the transmitter.

A calibration file is TOML: `format = 1` and `gains = [[real, imag], ...]`, one for each receive
channel: what the channel makes of an input of 1. Samples are divided by it.
"""

from __future__ import annotations

import math
import tomllib
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError

_MAX_BYTES = 1 << 20


@dataclass(frozen=True, eq=False)
class Calibration:
    """Gains of the receive channels, complex128 (Nr,)."""

    gains: NDArray[np.complex128]


def load_calibration(path: Path, channels: int) -> Calibration:
    """Gains of a calibration file.

    Raises:
        InputError: a file that cannot be read, is not as stated above, or is for another number of
            receive channels.
    """
    try:
        if path.stat().st_size > _MAX_BYTES:
            raise InputError(path, "", f"{path.stat().st_size} bytes", "a text of at most 1 MiB")
        tables = tomllib.loads(path.read_text(encoding="utf-8"))
    except OSError as fault:
        raise InputError(path, "", fault.strerror or str(fault), "a readable file") from fault
    except (ValueError, RecursionError) as fault:
        raise InputError(path, "", str(fault), "TOML 1.0 in UTF-8") from fault
    for key in tables:
        if key not in ("format", "gains"):
            raise InputError(path, key, "an unknown key", "format, gains")
    if tables.get("format") != 1:
        raise InputError(path, "format", tables.get("format", "nothing"), "1")
    given = tables.get("gains")
    if not isinstance(given, list) or len(given) != channels:
        found = f"{len(given)} gains" if isinstance(given, list) else "no list"
        raise InputError(path, "gains", found, f"{channels}, one for each receive channel")
    return Calibration(np.array([_gain(path, i, g) for i, g in enumerate(given)], np.complex128))


def _gain(path: Path, index: int, given: object) -> complex:
    parts = given if isinstance(given, list) and len(given) == 2 else []
    numbers = [float(p) for p in parts if isinstance(p, int | float) and not isinstance(p, bool)]
    gain = complex(*numbers) if len(numbers) == 2 else 0j
    if gain == 0 or not (math.isfinite(gain.real) and math.isfinite(gain.imag)):
        expected = "[real, imaginary], finite, not both zero"
        raise InputError(path, f"gains[{index}]", given, expected)
    return gain
