"""Stages that go by what the fit leaves, kept from frames that the fit does not explain.

In differential form a frame is received though its channel has moved. What a standing channel then
leaves is signal: it would pass for delays, for I and Q out of balance, for interference.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
import scipy.stats
from numpy.typing import NDArray

from spatiq.receiver.alignment import kept, one_frame, restore
from spatiq.receiver.frame_batch import FrameBatch

# Probability that chance raises the payload's noise so far over that of the known symbols.
_CHANCE = 1e-6
_FLOOR = 1e-5  # of the signal: below, errors are rounding, which no chance law describes


@dataclass(frozen=True, eq=False)
class StandingFrames:
    """A stage that runs others and undoes what they do to frames that the fit does not explain.

    Attributes:
        stages: in order.
        periods: payload periods of a frame.
    """

    stages: Sequence[Callable[[FrameBatch], FrameBatch]]
    periods: int

    def __call__(self, batch: FrameBatch) -> FrameBatch:
        """Run the stages."""
        frames = [one_frame(batch, int(i)) for i in np.flatnonzero(self._unexplained(batch))]
        before = [kept(frame) for frame in frames]
        for stage in self.stages:
            batch = stage(batch)
        for frame, arrays in zip(frames, before, strict=True):
            restore(frame, arrays)
        return batch

    def _unexplained(self, batch: FrameBatch) -> NDArray[np.bool_]:
        channels = batch.channel.shape[1]
        header = max(batch.header_freedom, 1)
        limit = scipy.stats.f.isf(_CHANCE, 2 * channels * self.periods, 2 * header)
        floor = _FLOOR * np.mean(np.abs(batch.channel) ** 2, axis=(1, 2))
        return np.asarray(batch.noise > limit * np.maximum(batch.header_noise, floor))
