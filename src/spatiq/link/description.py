"""A checked link description, everything in it built."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from spatiq.link.explain import explanation
from spatiq.link.layout import FrameLayout, words_in
from spatiq.link.payload import PayloadFormat
from spatiq.link.schema import LinkSpec
from spatiq.signal.codebooks import Codebook
from spatiq.signal.pulses import Pulse


@dataclass(frozen=True, eq=False)
class Link:
    """What is on the air: everything that transmitter and receiver agree on.

    Attributes:
        name: stated in the file, else the file's name without its endings.
        path: the file; None when the text came from elsewhere.
        text: the file's text.
        antennas: Nt, transmit antennas.
        symbol_rate_hz: symbol periods per second.
        carrier_hz: carrier frequency; None when not stated.
        clock: "locked": carrier and symbol clock come from one reference; "independent": they may
            be off by different ratios.
        codebook: word -> transmit vector.
        pulse: shape of a symbol.
        layout: which symbol period of a frame carries what.
        payload: what the payload's bits are.
        period_symbols: frame period, start to start, in symbol periods; None when frames may come
            at any time.
        spec: the file's tables, checked.
    """

    name: str
    path: Path | None
    text: str
    antennas: int
    symbol_rate_hz: float
    carrier_hz: float | None
    clock: str
    codebook: Codebook
    pulse: Pulse
    layout: FrameLayout
    payload: PayloadFormat
    period_symbols: float | None
    spec: LinkSpec

    @property
    def frame_symbols(self) -> int:
        """Symbol periods per frame, K."""
        return self.layout.length

    @property
    def words_per_frame(self) -> int:
        """Payload words per frame, Kw; as many as payload periods but in differential form."""
        return words_in(self.layout, self.codebook)

    def carried(self, words: NDArray[np.int64]) -> NDArray[np.int64]:
        """Which of the codebook's vectors each payload period carries.

        Args:
            words: int64, shape (F, Kw); -1 where unknown.

        Returns:
            int64, shape (F, Kp); -1 where unknown.
        """
        if self.codebook.block == 1:
            return words
        runs = [n // self.codebook.block - 1 for n in self.layout.payload_runs()]
        parts = np.split(words, np.cumsum(runs)[:-1], axis=1)
        return np.concatenate([self.codebook.carried(p) for p in parts], axis=1)

    def explain(self) -> str:
        """The link in tables of plain text, at most 100 columns wide."""
        return explanation(
            name=self.name,
            symbol_rate_hz=self.symbol_rate_hz,
            carrier_hz=self.carrier_hz,
            clock=self.clock,
            codebook=self.codebook,
            pulse=self.pulse,
            layout=self.layout,
            payload=self.payload,
            period_symbols=self.period_symbols,
        )
