"""Plain text in aligned columns, at most 100 wide."""

from __future__ import annotations

import textwrap
from collections.abc import Sequence

WIDTH = 100


def columns(
    head: Sequence[str], rows: Sequence[Sequence[str]], right: frozenset[int] = frozenset()
) -> list[str]:
    """A table: the last column is wrapped where the line would be too long.

    Args:
        head: names of the columns.
        rows: cells, as many as columns.
        right: columns set flush right; never the last.
    """
    every = [head, *rows]
    widths = [max(len(r[i]) for r in every) for i in range(len(head) - 1)]
    indent = 2 + sum(widths) + 2 * len(widths)
    room = max(WIDTH - indent, 20)
    lines = []
    for row in every:
        cells = [
            c.rjust(w) if i in right else c.ljust(w)
            for i, (c, w) in enumerate(zip(row[:-1], widths, strict=True))
        ]
        first, *more = textwrap.wrap(row[-1], room) or [""]
        lines.append(("  " + "  ".join([*cells, first])).rstrip())
        lines += [" " * indent + m for m in more]
    return lines


def pairs(entries: Sequence[tuple[str, str]]) -> list[str]:
    """Names and values, one pair a line."""
    width = max(len(name) for name, _ in entries)
    lines = []
    for name, value in entries:
        first, *more = textwrap.wrap(value, WIDTH - width - 4) or [""]
        lines.append(f"  {name.ljust(width)}  {first}".rstrip())
        lines += [" " * (width + 4) + m for m in more]
    return lines


_PREFIXES = ((1e9, "G"), (1e6, "M"), (1e3, "k"), (1.0, ""), (1e-3, "m"), (1e-6, "µ"), (1e-9, "n"))


def quantity(value: float, unit: str, digits: int = 6) -> str:
    """A value with a decimal prefix to its unit: 2.45 GHz."""
    if value == 0:
        return f"0 {unit}"
    scale, prefix = next((p for p in _PREFIXES if abs(value) >= p[0] * 0.9999995), _PREFIXES[-1])
    return f"{value / scale:.{digits}g} {prefix}{unit}"
