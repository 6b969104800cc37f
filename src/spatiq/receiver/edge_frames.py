"""Frames under way when the recording began or ended, whose sync section lies outside it.

The frame period says where such a frame would be; whether it was sent, only its power tells. Of
"noise" and "noise and signal as in the frame next to it", the one whose mean power lies nearer to
the fragment's is taken to be true.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from spatiq.receiver.cleaning import Cleaning
from spatiq.receiver.frame_batch import NOT_FINITE, NOT_FOUND, FrameBatch, LostFrame
from spatiq.receiver.front_end_survey import Survey
from spatiq.receiver.link_tables import LinkTables
from spatiq.recording.placement import Segment
from spatiq.recording.recording import DEFAULT_BLOCK, Recording

_MOST_FRAMES = 64  # looked for beyond the first and last frame found


@dataclass
class EdgeFrames:
    """Looks beyond the first and the last frame found.

    Attributes:
        recording: samples.
        tables: which periods are active.
        period: frame period in samples.
        samples_per_symbol: nominal.
        survey: what is taken out of the samples first.
    """

    recording: Recording
    tables: LinkTables
    period: float
    samples_per_symbol: float
    survey: Survey

    def before(self, batch: FrameBatch) -> list[LostFrame]:
        """Frames cut off by the recording's start, from the first frame of a received batch."""
        return self._look(batch, 0, -1)[::-1]

    def after(self, batch: FrameBatch) -> list[LostFrame]:
        """Frames cut off by the recording's end, from the last frame of a received batch."""
        return self._look(batch, batch.count - 1, +1)

    def _look(self, batch: FrameBatch, i: int, way: int) -> list[LostFrame]:
        segment = self.recording.segments[batch.segment[i]]
        start = float(batch.first_sample[i] + batch.t0[i])
        noise = float(batch.noise[i])
        middle = noise + self._signal_power(batch, i) / 2
        found: list[LostFrame] = []
        for n in range(1, _MOST_FRAMES + 1):
            at = start + way * n * self.period
            first = at + self.tables.active[0] * self.samples_per_symbol
            last = at + self.tables.active[-1] * self.samples_per_symbol
            begin, end = max(first, segment.start), min(last, segment.stop)
            if end - begin < self.samples_per_symbol:
                break
            power, finite = self._power(segment, int(begin), int(end))
            if power < middle:
                break
            cut = first < segment.start or last > segment.stop - 1
            reason = self._cut_by(segment, way) if cut else NOT_FOUND if finite else NOT_FINITE
            found.append(LostFrame(segment.index, at, -1, reason))
        return found

    def _cut_by(self, segment: Segment, way: int) -> str:
        outer = 0 if way < 0 else len(self.recording.segments) - 1
        if segment.index != outer:
            return "cut off by a gap"
        return "cut off by the start" if way < 0 else "cut off by the end"

    def _signal_power(self, batch: FrameBatch, i: int) -> float:
        """Mean signal power per sample and channel while a frame is on the air."""
        received = batch.channel[i] @ self.tables.codebook.vectors.T
        energy = np.mean(np.sum(np.abs(received) ** 2, axis=0)) / received.shape[0]
        amplitude = np.mean(self.tables.active_amplitude.astype(np.float64) ** 2)
        return float(energy * amplitude / self.samples_per_symbol)

    def _power(self, segment: Segment, begin: int, end: int) -> tuple[float, bool]:
        """Mean power of the finite ones of samples begin..end-1, and whether all are finite."""
        end = min(max(end, begin + 1), segment.stop)
        total, count = 0.0, 0
        cleaning = Cleaning(self.survey)
        first = cleaning.begin(segment, begin)
        read = self.recording.blocks(cleaning.block_size(DEFAULT_BLOCK), first, end)
        for block in cleaning.blocks(read, segment, first):
            samples = block.samples[:, max(begin - first, 0) :]
            first += block.samples.shape[1]
            finite = samples[np.isfinite(samples)]
            total += float(np.sum(np.abs(finite).astype(np.float64) ** 2))
            count += finite.size
        return total / max(count, 1), count == (end - begin) * self.recording.channels
