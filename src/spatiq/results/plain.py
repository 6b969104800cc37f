"""Figures as plain JSON values: what is missing is null, never a number that looks measured."""

from __future__ import annotations

import json
import math
from collections.abc import Iterator, Mapping
from typing import Any

import numpy as np


def plain(value: Any) -> Any:
    """Nested figures with NumPy types turned into Python's and non-finite numbers into None."""
    if isinstance(value, Mapping):
        return {str(key): plain(inner) for key, inner in value.items()}
    if isinstance(value, list | tuple):
        return [plain(inner) for inner in value]
    if isinstance(value, np.ndarray):
        return plain(value.tolist())
    if isinstance(value, np.generic):
        return plain(value.item())
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value


def json_text(value: Any, *, indent: int | None = 2) -> str:
    """Strict JSON of figures; raises TypeError for what is not a figure, a text or a collection."""
    return json.dumps(plain(value), indent=indent, allow_nan=False, ensure_ascii=False)


def leaves(value: Mapping[str, Any], prefix: str = "") -> Iterator[tuple[str, Any]]:
    """Single figures of a nested summary with their dotted names, lists left out."""
    for key, inner in value.items():
        name = f"{prefix}{key}"
        if isinstance(inner, Mapping):
            yield from leaves(inner, f"{name}.")
        elif not isinstance(inner, list | tuple):
            yield name, inner
