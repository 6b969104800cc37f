"""Texts of the options of `spatiq simulate` -> numbers."""

from __future__ import annotations

import cmath
import math
from collections.abc import Callable, Sequence
from typing import TypeVar

from spatiq.errors import InputError

T = TypeVar("T")


def parsed(text: str, option: str, expected: str, read: Callable[[str], T]) -> T:
    """read(text); InputError naming the option when that raises ValueError."""
    try:
        return read(text)
    except ValueError as error:
        raise InputError(option, "", repr(text), expected) from error


def split_numbers(text: str, separator: str, option: str, expected: str) -> list[float]:
    """ "1,2.5" -> [1.0, 2.5]."""
    return parsed(text, option, expected, lambda whole: [float(p) for p in whole.split(separator)])


def number_list(text: str, option: str, expected: str) -> list[float] | None:
    """Numbers with commas between; nothing: None."""
    return split_numbers(text, ",", option, expected) if text else None


def number_or_range(text: str, option: str, expected: str) -> float | tuple[float, float]:
    """ "x" -> x; "x:y" -> (x, y)."""
    values = split_numbers(text, ":", option, expected)
    if len(values) > 2:
        raise InputError(option, "", repr(text), expected)
    return values[0] if len(values) == 1 else (values[0], values[1])


def number_pair(text: str, option: str, expected: str) -> tuple[float, float]:
    """ "x:y" -> (x, y)."""
    values = number_or_range(text, option, expected)
    if not isinstance(values, tuple):
        raise InputError(option, "", repr(text), expected)
    return values


def whole(value: float, text: str, option: str, expected: str) -> int:
    """A number that must be an integer."""
    if not (math.isfinite(value) and value == int(value)):
        raise InputError(option, "", repr(text), expected)
    return int(value)


def phasors(text: str, option: str) -> list[complex] | None:
    """ "0,-3@45" -> amplitudes: dB, and degrees behind @; "-inf" is 0; nothing: None."""
    expected = "dB or dB@degrees, with commas between: 0,-3@45"

    def amplitude(part: str) -> complex:
        level, at, angle = part.partition("@")
        return cmath.rect(10 ** (float(level) / 20), math.radians(float(angle) if at else 0.0))

    if not text:
        return None
    return parsed(text, option, expected, lambda t: [amplitude(part) for part in t.split(",")])


def settings(text: str, option: str, keys: Sequence[str]) -> dict[str, str]:
    """ "a=1,b=2" -> {"a": "1", "b": "2"}; only known keys, each once."""
    found: dict[str, str] = {}
    expected = f"KEY=VALUE with commas between; keys: {', '.join(keys)}"
    for part in text.split(","):
        key, equals, value = part.strip().partition("=")
        if not equals or key not in keys or key in found:
            raise InputError(option, "", repr(part), expected)
        found[key] = value
    return found
