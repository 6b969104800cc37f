"""How figures are worded for people: missing ones as a dash, zero errors as an upper bound."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

DASH = "-"


def printable(text: object) -> str:
    """Text from a file as one line without control characters."""
    return "".join(c if c.isprintable() else "?" for c in str(text))


def pick(figures: Mapping[str, Any] | None, *path: str) -> Any:
    """Figure at a path of a nested summary; None when any part of it is missing."""
    value: Any = figures
    for key in path:
        if not isinstance(value, Mapping):
            return None
        value = value.get(key)
    return value


def number(value: float | None, unit: str = "", digits: int = 3) -> str:
    """A figure to `digits` significant digits; small and large ones with an exponent."""
    if value is None or math.isnan(value):
        return DASH
    text = f"{value:.{digits}g}" if value else "0"
    if "e" in text and 1e-3 <= abs(value) < 1e6:
        text = f"{value:.0f}"
    return f"{text} {unit}" if unit else text


def fixed(value: float | None, unit: str = "", decimals: int = 2) -> str:
    """A figure with a fixed number of decimals, for columns that are read downwards."""
    if value is None or math.isnan(value):
        return DASH
    text = f"{value:.{decimals}f}"
    return f"{text} {unit}" if unit else text


def plus_minus(value: float | None, std: float | None) -> str:
    """A figure with its standard deviation, to the decimals that this has two digits of."""
    if value is None or std is None or not std > 0 or not math.isfinite(value):
        return DASH
    decimals = min(max(0, 1 - math.floor(math.log10(std))), 6)
    return f"{value:.{decimals}f} +- {std:.{decimals}f}"


def count(value: int | None) -> str:
    """A whole number with its thousands set apart."""
    return DASH if value is None else f"{value:,}"


def ratio(value: float | None, high: float | None, errors: int | None) -> str:
    """A ratio of counts: with zero errors its upper bound, never 0."""
    if errors == 0 and high is not None and not math.isnan(high):
        return f"< {number(high)}"
    if not value:  # zero errors without a bound say nothing
        return DASH
    return number(value)


def ratio_of(figures: Any) -> str:
    """The same for a summary entry {value, high, errors, ...}."""
    errors = 0 if pick(figures, "is_upper_bound") else pick(figures, "errors")
    return ratio(pick(figures, "value"), pick(figures, "high"), errors)


def interval(low: float | None, high: float | None, unit: str = "") -> str:
    """A range in words; empty when an end is missing."""
    if low is None or high is None:
        return ""
    return f"{number(low)} to {number(high, unit)}"


def listing(counts: Mapping[str, int] | None) -> str:
    """Reasons with how often each occurred, the most frequent first."""
    ranked = sorted((counts or {}).items(), key=lambda entry: (-entry[1], entry[0]))
    return ", ".join(f"{count(n)} {printable(reason)}" for reason, n in ranked if n)


def marks_text(marks: int, names: Mapping[str, int]) -> str:
    """Names of the marks set in a flags word, in plain words."""
    return ", ".join(n.lower().replace("_", " ") for n, bit in names.items() if marks & bit)


def antenna_set(antennas: tuple[int, ...]) -> str:
    """Name of an antenna set, as in "2" or "0+3"."""
    return "+".join(str(a) for a in antennas) or "none"
