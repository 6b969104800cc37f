"""A channel that moves within a frame, as the stages after its estimation see it."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from enum import IntEnum
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray


class Following(IntEnum):
    """How a frame's channel and phase were had."""

    STILL = 0  # one channel, phase on a straight line
    FOLLOWED = 1  # from the known symbols on, by decisions
    INTERPOLATED = 2  # interpolated between known symbols in the payload, refined by decisions


@dataclass(frozen=True, eq=False)
class MovingChannel:
    """H(k) of one frame, constant over short blocks of symbol periods.

    Attributes:
        channels: complex128 (B, Nr, Nt).
        block: int64 (Kp,); block of each payload period, ascending.
        following: how it was had.
        bandwidth: W, Doppler spread assumed, +- cycles per symbol period; 0: channel constant.
        walk: variance of the common phase's walk per symbol period, radians^2; 0: none.
    """

    channels: NDArray[np.complex128]
    block: NDArray[np.int64]
    following: Following
    bandwidth: float
    walk: float

    def runs(self) -> Iterator[tuple[slice, NDArray[np.complex128]]]:
        """Runs of payload periods of one channel (Nr, Nt)."""
        if len(self.channels) == 1:
            yield slice(0, self.block.size), self.channels[0]
            return
        edges = np.flatnonzero(np.diff(self.block)) + 1
        bounds = np.concatenate([[0], edges, [self.block.size]])
        for first, stop in pairwise(bounds):
            yield slice(int(first), int(stop)), self.channels[self.block[first]]

    def instants(self, count: int) -> NDArray[np.complex128]:
        """Channels (n, Nr, Nt), n up to `count`, spread evenly over the payload."""
        places = (np.arange(count) + 0.5) / count * self.block.size
        return self.channels[np.unique(self.block[places.astype(np.int64)])]

    def through(self, matrix: NDArray[np.complex128]) -> MovingChannel:
        """The same behind a matrix (Nr, Nr) over the receive channels."""
        return replace(self, channels=matrix @ self.channels)
