"""Blocks of payload with a guard each: cyclic prefix, zero padding, multicarrier.

To add a form: its name in `FORMS`, what `fill_blocks` makes of it, its line in manual.md.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

CYCLIC_PREFIX = "cyclic-prefix"
ZERO_PADDING = "zero-padding"
MULTICARRIER = "multicarrier"
FORMS = (CYCLIC_PREFIX, ZERO_PADDING, MULTICARRIER)


@dataclass(frozen=True, eq=False)
class BlockRun:
    """The blocks of one payload section, one behind the other.

    Attributes:
        form: of `FORMS`.
        start: first symbol period.
        count: blocks.
        length: N, periods of a block's body.
        guard: P, periods of its guard.
        slots: int64 (U,); places in the body that words take: all periods, or the subcarriers used.
    """

    form: str
    start: int
    count: int
    length: int
    guard: int
    slots: NDArray[np.int64]

    @property
    def has_prefix(self) -> bool:
        """Whether the guard comes first and repeats the body's end."""
        return self.form != ZERO_PADDING

    @property
    def bodies(self) -> NDArray[np.int64]:
        """First period of each body, (count,)."""
        first = self.start + (self.guard if self.has_prefix else 0)
        return first + (self.length + self.guard) * np.arange(self.count, dtype=np.int64)

    @property
    def periods(self) -> NDArray[np.int64]:
        """Periods of all bodies, (count, N)."""
        return self.bodies[:, None] + np.arange(self.length)

    @property
    def payload(self) -> NDArray[np.int64]:
        """Periods, or subcarriers counted from the body's first period, of the words: ascending."""
        return (self.bodies[:, None] + self.slots).ravel()


def fill_blocks(frames: NDArray[np.complex128], runs: Sequence[BlockRun]) -> None:
    """Words at their places -> what is sent: multicarrier bodies and prefixes are filled in.

    Args:
        frames: complex128 (..., K, Nt), changed; the vectors of a multicarrier block's words stand
            at body + subcarrier.
        runs: of the layout.
    """
    for run in runs:
        if run.form == MULTICARRIER:
            body = frames[..., run.periods, :]
            sent = np.fft.ifft(body, axis=-2) * np.sqrt(run.length)
            frames[..., run.periods, :] = sent
        if run.has_prefix and run.guard:
            prefix = run.periods[:, -run.guard :]
            frames[..., prefix - run.length, :] = frames[..., prefix, :]


def take_subcarriers(
    received: NDArray[np.complex128], runs: Sequence[BlockRun]
) -> NDArray[np.complex128]:
    """What is received in each period -> at each word's place: the reverse of `fill_blocks`.

    Args:
        received: complex128 (K, Nr).
        runs: of the layout.

    Returns:
        The same, multicarrier bodies turned into subcarriers.
    """
    out = received.copy()
    for run in runs:
        if run.form == MULTICARRIER:
            out[run.periods] = np.fft.fft(received[run.periods], axis=-2) / np.sqrt(run.length)
    return out
