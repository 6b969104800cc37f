"""Checks of single values that come from an untrusted file; each refusal is one line."""

from __future__ import annotations

import math
import os
from collections.abc import Mapping
from typing import Any

from spatiq.errors import InputError

# Largest value the standard allows for an index (signed 64-bit).
MAX_INDEX = 2**63 - 1
_SHOWN = 60
# A colon is part of many a recording's name (time of day), but a drive on one system.
_SEPARATORS = "/\\:" if os.name == "nt" else "/\\"


def shown(value: object) -> str:
    """Value as one short printable line, whatever a hostile file put into it."""
    if isinstance(value, str):
        text = ascii(value[: _SHOWN + 1])
    elif isinstance(value, dict):
        return f"an object with {len(value)} fields"
    elif isinstance(value, list):
        return f"an array with {len(value)} elements"
    elif isinstance(value, int) and not isinstance(value, bool) and abs(value) >= 10**30:
        return "an integer of more than 30 digits"
    else:
        text = ascii(value)
    return text if len(text) <= _SHOWN else text[:_SHOWN] + "..."


def whole_number(
    fields: Mapping[str, Any],
    key: str,
    source: str,
    place: str,
    *,
    default: int | None = None,
    low: int = 0,
    high: int = MAX_INDEX,
) -> int:
    """Integer field within low..high; floats, booleans and strings are refused.

    Raises:
        InputError: missing without default, not a plain integer, or out of range.
    """
    expected = f"an integer {low}..{high}" if high != MAX_INDEX else f"an integer >= {low}"
    if key not in fields:
        if default is None:
            raise InputError(source, f"{place}.{key}", "nothing", expected)
        return default
    value = fields[key]
    if not isinstance(value, int) or isinstance(value, bool) or not low <= value <= high:
        raise InputError(source, f"{place}.{key}", shown(value), expected)
    return value


def number(
    fields: Mapping[str, Any], key: str, source: str, place: str, *, low: float, high: float
) -> float | None:
    """Finite number within low..high, or None when the field is absent.

    Raises:
        InputError: not a number, not finite, or out of range.
    """
    if key not in fields:
        return None
    value = fields[key]
    good = isinstance(value, int | float) and not isinstance(value, bool)
    # Compared before it is converted: a huge integer does not fit a float.
    if not good or not low <= value <= high or not math.isfinite(value):
        raise InputError(
            source, f"{place}.{key}", shown(value), f"a finite number {low:g}..{high:g}"
        )
    return float(value)


def text_field(fields: Mapping[str, Any], key: str, source: str, place: str) -> str | None:
    """String field, or None when absent.

    Raises:
        InputError: anything but a string.
    """
    value = fields.get(key)
    if key in fields and not isinstance(value, str):
        raise InputError(source, f"{place}.{key}", shown(value), "a string")
    return value


def base_name(value: object, source: str, field: str) -> str:
    """Name of a file in the same folder: no folder, drive, control character or parent in it.

    Raises:
        InputError: the name could lead anywhere else.
    """
    expected = "the name of a file in the same folder, without any folder"
    if not isinstance(value, str) or not 0 < len(value) <= 255 or value in (".", ".."):
        raise InputError(source, field, shown(value), expected)
    if any(c in _SEPARATORS or ord(c) < 32 or 0xD800 <= ord(c) < 0xE000 for c in value):
        raise InputError(source, field, shown(value), expected)
    return value
