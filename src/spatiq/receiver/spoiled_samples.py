"""Where in a recording are samples that are not finite? Kept while a frame may still ask."""

from __future__ import annotations

from bisect import bisect_left

import numpy as np
from numpy.typing import NDArray


class SpoiledSamples:
    """Runs of spoiled samples, in per-channel file indices.

    Runs closer than `reach` are joined: a frame whose filter reaches into the gap between them
    touches one of them anyway, as no frame is shorter.
    """

    def __init__(self, reach: int) -> None:
        self._reach = reach
        self._starts: list[int] = []
        self._stops: list[int] = []

    def add(self, positions: NDArray[np.int64]) -> None:
        """Enter samples, ascending, all behind those entered before."""
        if not positions.size:
            return
        gaps = np.flatnonzero(np.diff(positions) > self._reach)
        starts = positions[np.concatenate([[0], gaps + 1])].tolist()
        stops = (positions[np.concatenate([gaps, [positions.size - 1]])] + 1).tolist()
        if self._stops and starts[0] - self._stops[-1] < self._reach:
            self._stops[-1] = stops[0]
            starts, stops = starts[1:], stops[1:]
        self._starts += starts
        self._stops += stops

    def within(self, first: float, last: float) -> bool:
        """Whether a run overlaps samples first..last."""
        i = bisect_left(self._stops, first + 1)
        return i < len(self._starts) and self._starts[i] <= last

    def forget(self, before: float) -> None:
        """Nobody will ask for samples before this one any more."""
        i = bisect_left(self._stops, before)
        del self._starts[:i], self._stops[:i]
