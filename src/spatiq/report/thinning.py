"""Which of many frames are drawn: those spread evenly, and every one that stands out."""

from __future__ import annotations

from collections.abc import Mapping
from itertools import pairwise
from typing import Any

import numpy as np
from numpy.typing import NDArray

MOST_DRAWN = 1500
_STRETCHES = 120
_WORST = 60
_MARKED = 25  # of each mark
_SEEN = ("ber", "evm_percent", "cfo_hz", "snr_db")


def frames_drawn(columns: Mapping[str, NDArray[Any]], most: int = MOST_DRAWN) -> NDArray[np.int64]:
    """Indices of the frames that are drawn, ascending; all of them up to `most`.

    Of more, each of `_STRETCHES` equal stretches keeps the smallest and largest value of what is
    seen over time; besides, the frames with most bit errors and, of each mark, those spread evenly
    over the frames that have it.

    Args:
        columns: of the frame table, each of shape (F,).
    """
    count = int(columns["frame"].size)
    if count <= most:
        return np.arange(count)
    kept = {0, count - 1}
    edges = np.linspace(0, count, _STRETCHES + 1).astype(int)
    for name in _SEEN:
        values = columns[name].astype(float)
        for start, stop in pairwise(edges.tolist()):
            part = values[start:stop]
            if np.isfinite(part).any():
                kept |= {int(start + np.nanargmin(part)), int(start + np.nanargmax(part))}
    errors = columns["bit_errors"]
    worst = np.argsort(-errors, kind="stable")[:_WORST]
    kept |= {int(i) for i in worst if errors[i]}
    marks = columns["marks"].astype(np.int64)
    for bit in range(32):
        kept |= set(spread_out(np.flatnonzero(marks & (1 << bit)), _MARKED).tolist())
    return np.array(sorted(kept), np.int64)


def spread_out(indices: NDArray[np.int64], most: int) -> NDArray[np.int64]:
    """At most `most` of the indices, evenly spread, first and last among them."""
    if indices.size <= most:
        return indices
    places = np.unique(np.linspace(0, indices.size - 1, most).round().astype(int))
    return np.asarray(indices[places], np.int64)
