"""Cleaning: constant and lines that the survey found are taken out of samples as they are read.

Lines are taken out chunk by chunk on a grid fixed to the segment's start, so that the samples do
not depend on how they are read: in each chunk a line's frequency is refined and its amplitude on
each receive channel estimated by least squares, the signal taken for noise. With N samples that
leaves of the line, and takes from the signal, some 1/N of the signal's power; the frame's own fit
(`interferer.py`) removes what is left.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from spatiq.receiver.front_end_survey import CHUNK, Survey
from spatiq.receiver.sample_stream import SampleBlock
from spatiq.recording.placement import Segment

_TURNS = 2  # refinements of a line's frequency


@dataclass(frozen=True, eq=False)
class CleanBlock:
    """Samples after cleaning, complex64 (Nr, n)."""

    samples: NDArray[np.complex64]


@dataclass
class Cleaning:
    """Cleans the samples of one pass over a recording; keeps what it took out of late chunks.

    Attributes:
        survey: what is to be taken out.
        clip: component values at or beyond which a sample counts as clipped, before cleaning.
        inverted: whether the samples are conjugated, after cleaning.
    """

    survey: Survey
    clip: tuple[float, float] = (-np.inf, np.inf)
    inverted: bool = False
    _clipped: list[NDArray[np.int64]] = field(default_factory=list)
    _taken: dict[tuple[int, int], NDArray[np.complex128]] = field(default_factory=dict)

    @property
    def active(self) -> bool:
        """Whether samples are changed at all."""
        return self.inverted or not self.survey.clean

    def begin(self, segment: Segment, sample: int) -> int:
        """Where reading has to begin so that `sample` is cleaned as in a whole pass."""
        if not self.survey.lines:
            return sample
        return segment.start + (sample - segment.start) // CHUNK * CHUNK

    def block_size(self, wanted: int) -> int:
        """Samples to be read at a time: whole chunks where there are lines."""
        return max(wanted // CHUNK, 1) * CHUNK if self.survey.lines else wanted

    def blocks(
        self, blocks: Iterator[SampleBlock], segment: Segment, begin: int
    ) -> Iterator[SampleBlock]:
        """The blocks, cleaned; `begin` is the file index of the first one's first sample."""
        if not self.active:
            return blocks
        return self._cleaned(blocks, segment, begin)

    def _cleaned(
        self, blocks: Iterator[SampleBlock], segment: Segment, begin: int
    ) -> Iterator[SampleBlock]:
        constant = self.survey.constant.astype(np.complex64)[:, None]
        at = begin
        for block in blocks:
            self._note_clipped(block.samples, at)
            samples = block.samples - constant
            for first in range(0, samples.shape[1] if self.survey.lines else 0, CHUNK):
                self._take_lines(samples[:, first : first + CHUNK], segment, at + first)
            at += samples.shape[1]
            yield CleanBlock(samples.conj() if self.inverted else samples)

    def _note_clipped(self, samples: NDArray[np.complex64], at: int) -> None:
        low, high = self.clip
        beyond = (samples.real <= low) | (samples.real >= high)
        beyond |= (samples.imag <= low) | (samples.imag >= high)
        if beyond.any():
            self._clipped.append(np.sort(np.nonzero(beyond)[1]) + at)

    def clipped(self, first: int, last: int) -> int:
        """Clipped samples first..last-1, all channels; places are asked for in rising order."""
        self._clipped = [part for part in self._clipped if part[-1] >= first]
        return sum(int(np.diff(np.searchsorted(part, (first, last)))[0]) for part in self._clipped)

    def _take_lines(self, chunk: NDArray[np.complex64], segment: Segment, at: int) -> None:
        """Take all lines out of a chunk (Nr, n), in place; samples not finite stay so."""
        finite = np.where(np.isfinite(chunk), chunk, 0).astype(np.complex128)
        n = chunk.shape[1]
        taken = np.zeros((len(self.survey.lines), chunk.shape[0] + 1), np.complex128)
        for k, start in enumerate(self.survey.lines):
            frequency = refined_frequency(finite, start)
            line = np.exp(2j * np.pi * frequency * np.arange(n))
            amplitude = finite @ line.conj() / n
            finite -= amplitude[:, None] * line
            chunk -= (amplitude[:, None] * line).astype(np.complex64)
            taken[k, 0], taken[k, 1:] = frequency, amplitude
        self._taken[segment.index, (at - segment.start) // CHUNK] = taken

    def taken(
        self, segment: Segment, first: int, last: int
    ) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Frequencies (L,) and powers (L, Nr) of the lines taken out of samples first..last.

        Means over the chunks that they touch. Places are asked for in rising order.
        """
        low, high = ((i - segment.start) // CHUNK for i in (max(first, segment.start), last))
        for key in [k for k in self._taken if k < (segment.index, low)]:
            del self._taken[key]
        keys = [(segment.index, k) for k in range(low, high + 1)]
        here = np.stack([self._taken[key] for key in keys if key in self._taken])
        sign = -1.0 if self.inverted else 1.0
        return sign * here[:, :, 0].real.mean(axis=0), (np.abs(here[:, :, 1:]) ** 2).mean(axis=0)


def refined_frequency(chunk: NDArray[np.complex128], frequency: float) -> float:
    """Frequency of a line in a chunk (Nr, n), from the phase between its two halves.

    Channels are weighted by what the line has on each. Method: S. A. Tretter, IEEE Trans. Inf.
    Theory 31(6), 1985, with two points. A chunk that is too short keeps the given one.
    """
    half = chunk.shape[1] // 2
    if half < CHUNK // 8:
        return frequency
    found = frequency
    for _ in range(_TURNS):
        turned = chunk[:, : 2 * half] * np.exp(-2j * np.pi * found * np.arange(2 * half))
        halves = turned.reshape(chunk.shape[0], 2, half).sum(axis=2)
        found += float(np.angle(np.sum(halves[:, 1] * halves[:, 0].conj()))) / (2 * np.pi * half)
    # Half a bin of the survey: beyond, there is no line in this chunk.
    return found if abs(found - frequency) * CHUNK <= 1.0 else frequency
