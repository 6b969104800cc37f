"""The frame as both ends see it: which symbol period carries what, from which antenna."""

from __future__ import annotations

from dataclasses import dataclass
from enum import IntEnum

import numpy as np
from numpy.typing import NDArray

from spatiq.link.blocks import MULTICARRIER, BlockRun
from spatiq.signal.codebook import Codebook


class Period(IntEnum):
    """What a symbol period carries."""

    SILENCE = 0
    SYNC = 1
    PILOT = 2
    KNOWN = 3  # a known symbol interspersed in a payload section
    PAYLOAD = 4
    PREFIX = 5  # repeats payload that follows
    BODY = 6  # of a multicarrier block: no word's own place


@dataclass(frozen=True)
class SectionSpan:
    """One section of the frame: symbol periods start..stop-1."""

    kind: str
    start: int
    stop: int
    text: str  # one line for people: what is sent, from where

    @property
    def length(self) -> int:
        """Symbol periods in this section."""
        return self.stop - self.start


@dataclass(frozen=True, eq=False)
class FrameLayout:
    """A frame of K symbol periods sent from Nt antennas.

    Attributes:
        known: complex128, shape (K, Nt); transmitted vectors of every period that is not payload,
            section power included; zero in payload and silence.
        kind: uint8, shape (K,); a `Period` for each symbol period.
        payload_index: int64, shape (Kp,); symbol periods that payload words take, ascending; in
            differential form with the reference blocks before them (kind PILOT). A word on
            subcarrier f of a multicarrier block takes the f-th period of the block's body.
        payload_amplitude: float64, shape (Kp,); amplitude factor of each of these, from its
            section's power.
        sections: the sections in order, as spans.
        blocks: payload sections sent in blocks with a guard each.
    """

    known: NDArray[np.complex128]
    kind: NDArray[np.uint8]
    payload_index: NDArray[np.int64]
    payload_amplitude: NDArray[np.float64]
    sections: tuple[SectionSpan, ...]
    blocks: tuple[BlockRun, ...] = ()

    @property
    def length(self) -> int:
        """Symbol periods per frame, K."""
        return int(self.kind.size)

    @property
    def antennas(self) -> int:
        """Number of transmit antennas, Nt."""
        return int(self.known.shape[1])

    @property
    def multicarrier(self) -> bool:
        """Whether words take subcarriers anywhere."""
        return any(run.form == MULTICARRIER for run in self.blocks)

    def payload_runs(self) -> tuple[int, ...]:
        """Periods that each payload section gives to words, reference blocks included."""
        inside = (
            int(np.sum((self.payload_index >= s.start) & (self.payload_index < s.stop)))
            for s in self.sections
            if s.kind == "payload"
        )
        return tuple(n for n in inside if n)

    @property
    def sync(self) -> SectionSpan:
        """The first sync section: what the frame search looks for."""
        return next(s for s in self.sections if s.kind == "sync")


def words_in(layout: FrameLayout, codebook: Codebook) -> int:
    """Payload words per frame, Kw: a section's first block of several periods carries none."""
    block = codebook.block
    return sum(n // block - (block > 1) for n in layout.payload_runs())
