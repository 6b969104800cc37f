"""Figures of each subcarrier of a multicarrier link: errors and EVM."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spatiq.link.description import Link
from spatiq.receiver.frame_batch import FrameBatch

# Columns of the sums of a frame, per subcarrier.
SUMS = ("compared", "antenna_errors", "symbol_errors", "error_energy", "reference_energy")


def subcarrier_numbers(link: Link) -> NDArray[np.int64] | None:
    """Subcarrier of each payload word, (Kp,); None unless all words take subcarriers of equal
    width."""
    runs = link.layout.blocks
    if not link.layout.multicarrier or len({run.length for run in runs}) != 1:
        return None
    numbers = np.concatenate([np.tile(run.slots, run.count) for run in runs])
    return numbers if numbers.size == link.layout.payload_index.size else None


def subcarrier_sums(
    batch: FrameBatch, link: Link, sent: NDArray[np.int64]
) -> NDArray[np.float64] | None:
    """Sums of each frame and subcarrier, float64 (F, N, 5), see `SUMS`; None without subcarriers.

    Args:
        batch: received frames.
        link: the link.
        sent: int64 (F, Kp); words as sent, -1 where unknown. EVM takes decided ones there.
    """
    numbers = subcarrier_numbers(link)
    if numbers is None or batch.dispersive is None:
        return None
    width = link.layout.blocks[0].length
    book = link.codebook
    out = np.zeros((batch.count, width, len(SUMS)))
    for i in range(batch.count):
        known = sent[i] >= 0
        words = np.where(known, sent[i], batch.words[i])
        wrong_set = known & (book.set_index[words] != book.set_index[batch.words[i]])
        other = book.symbol_index[words] != book.symbol_index[batch.words[i]]
        left = batch.dispersive.unexplained(i, words)
        channels = batch.dispersive.channels_of_words(i)
        made = np.einsum("kra,ka->kr", channels, book.vectors[words])
        columns = (
            known,
            wrong_set,
            known & ~wrong_set & other,
            np.sum(np.abs(left) ** 2, axis=1),
            np.sum(np.abs(made) ** 2, axis=1),
        )
        for j, column in enumerate(columns):
            out[i, :, j] = np.bincount(numbers, column.astype(np.float64), width)
    return out


@dataclass
class SubcarrierSummary:
    """Sums over frames, added one by one: the same however frames come in batches."""

    _sums: NDArray[np.float64] | None = field(default=None)

    def add(self, sums: NDArray[np.float64]) -> None:
        """Take in frames (F, N, 5)."""
        for frame in sums:
            self._sums = frame.copy() if self._sums is None else self._sums + frame

    def as_dicts(self) -> list[dict[str, Any]] | None:
        """A row for each subcarrier in use; None without any. Ratios are missing at no comparison.

        power: share of the mean received power of all subcarriers, in dB.
        """
        if self._sums is None:
            return None
        used = np.flatnonzero(self._sums[:, 4] > 0)
        mean = float(np.mean(self._sums[used, 4])) if used.size else 0.0
        rows = []
        for f in used.tolist():
            compared, antenna, symbol, error, reference = self._sums[f].tolist()
            rows.append(
                {
                    "subcarrier": f,
                    "compared": int(compared),
                    "antenna_errors": int(antenna),
                    "symbol_errors": int(symbol),
                    "word_error_ratio": (antenna + symbol) / compared if compared else None,
                    "evm_percent": 100 * float(np.sqrt(error / reference)),
                    "power_db": float(10 * np.log10(reference / mean)),
                }
            )
        return rows
