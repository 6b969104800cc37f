"""Whitening in differential form: the noise is told from blocks alone, without the channel.

Y_t - Y_{t-1} X_t holds the noise of two blocks and nothing of a channel that stands still from one
to the next: its covariance over the receive channels is twice that of the noise, however the
channel moves within the frame. Each block's noise enters twice, so that no more than half of the
vectors count as independent.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from spatiq.receiver.differential_detection import detect_blocks
from spatiq.receiver.frame_batch import FrameBatch
from spatiq.receiver.refit import Refit
from spatiq.receiver.whitening import ROUNDS, uneven_beyond, unevenness, whiten_frame
from spatiq.signal.codebooks import DifferentialCodebook


@dataclass(frozen=True, eq=False)
class DifferentialWhitening:
    """The stage, in the place of channel following and whitening.

    Attributes:
        refit: run again on frames that were whitened.
        codebook: of the differential form.
        runs: payload periods of each section.
    """

    refit: Refit
    codebook: DifferentialCodebook
    runs: tuple[int, ...]

    def __call__(self, batch: FrameBatch) -> FrameBatch:
        """Whiten what is not white; fill whitener and coloured."""
        channels = batch.channel.shape[1]
        if channels < 2:
            return batch
        limit = uneven_beyond(channels)
        for i in range(batch.count):
            for _ in range(ROUNDS):
                left = self._left(batch.symbols[i])
                covariance = left.T @ left.conj() / (2 * max(len(left), 1))
                if unevenness(covariance, len(left) // 2) <= limit:
                    break
                whiten_frame(batch, i, covariance, self.refit.refit_frame)
        return batch

    def _left(self, y: NDArray[np.complex64]) -> NDArray[np.complex128]:
        """Y_t - Y_{t-1} X_t of a frame's words as decided, complex128 (n, Nr)."""
        parts = np.split(y, np.cumsum(self.runs)[:-1])
        return np.concatenate([differences(p, detect_blocks(p, self.codebook), self.codebook)
                               for p in parts])  # fmt: skip


def differences(
    y: NDArray[np.complex64], words: NDArray[np.int64], codebook: DifferentialCodebook
) -> NDArray[np.complex128]:
    """What each block leaves when the one before is turned by its word: complex128 (n Nt, Nr).

    Args:
        y: complex64, shape ((n + 1) Nt, Nr).
        words: int64, shape (n,).
        codebook: of the differential form.
    """
    block = codebook.block
    blocks = y.astype(np.complex128).reshape(-1, block, y.shape[1])
    rows = codebook.permutations[codebook.set_index[words]]
    turn = codebook.vectors[codebook.turns[words], 0]
    before = np.take_along_axis(blocks[:-1], rows[:, :, None], axis=1)
    left = blocks[1:] - before * turn[:, :, None]
    return np.asarray(left.reshape(-1, y.shape[1]))
