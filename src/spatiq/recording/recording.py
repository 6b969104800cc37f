"""A recording as the receiver sees it: segments, and blocks of complex samples of all channels."""

from __future__ import annotations

import hashlib
from bisect import bisect_right
from collections.abc import Iterator, Mapping
from contextlib import ExitStack
from dataclasses import dataclass, field
from functools import cached_property
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError
from spatiq.recording.dataset import Dataset, FrameReader
from spatiq.recording.placement import Segment
from spatiq.recording.times import Instant

DEFAULT_BLOCK = 1 << 18


@dataclass(frozen=True, eq=False)
class Block:
    """A run of samples within one segment.

    Attributes:
        segment: the segment it lies in.
        start: per-channel index of the first sample, counted over the recording.
        samples: complex64, shape (Nr, n), C-contiguous; integers scaled to full scale = 1.0.
        clipped: int64, shape (Nr,); samples whose I or Q sits at an end of the integer range;
            zeros for float samples, whose range is unknown (see Recording.clipping_known).
        invalid: int64, shape (Nr,); float samples that are not finite.
    """

    segment: Segment
    start: int
    samples: NDArray[np.complex64]
    clipped: NDArray[np.int64]
    invalid: NDArray[np.int64] = field(default_factory=lambda: np.zeros(0, np.int64))

    @property
    def stop(self) -> int:
        """One past the last sample."""
        return self.start + int(self.samples.shape[1])


@dataclass(frozen=True)
class Run:
    """Samples start.. of the recording are samples `starts[i]`.. of dataset i, `count` of them."""

    start: int
    count: int
    starts: tuple[int, ...]


@dataclass(frozen=True, eq=False)
class Recording:
    """One recording, or a collection of recordings with one or more receive channels each.

    Attributes:
        name: base name.
        path: what was opened.
        sample_rate: Hz.
        channels: receive channels, Nr.
        datatype: as in core:datatype; joined by "+" where the channels' files differ.
        segments: ascending; they tile samples 0..n_samples-1.
        warnings: what was put up with, one line each.
        carrier_hz: the one frequency that captures state; None when none does or they differ.
        datasets: the files behind it, in order of channels.
        runs: where each stretch of samples lies in each dataset.
        collection: the collection object, None for a single recording.
    """

    name: str
    path: Path
    sample_rate: float
    channels: int
    datatype: str
    segments: tuple[Segment, ...]
    warnings: tuple[str, ...]
    carrier_hz: float | None
    datasets: tuple[Dataset, ...]
    runs: tuple[Run, ...]
    collection: Mapping[str, Any] | None = None

    @property
    def meta(self) -> dict[str, Any]:
        """Metadata document as parsed, not to be changed; of a collection's first recording."""
        return self.datasets[0].metadata.raw

    @property
    def n_samples(self) -> int:
        """Samples per channel."""
        return self.segments[-1].stop

    @property
    def duration_s(self) -> float:
        """Seconds of samples, gaps not counted."""
        return self.n_samples / self.sample_rate

    @property
    def clipping_known(self) -> bool:
        """True when samples at the ends of the range can be counted: integers in all files."""
        return all(d.metadata.sample_type.is_integer for d in self.datasets)

    def digest(self) -> str:
        """SHA-256 over the data files in order of channels, streamed; hexadecimal.

        For a single recording this is the digest of its data file (in an archive: of the member).
        """
        digest = hashlib.sha256()
        for dataset in self.datasets:
            for chunk in dataset.data.chunks():
                digest.update(chunk)
        return digest.hexdigest()

    def segment_at(self, sample: int) -> Segment:
        """Segment that holds a sample.

        Raises:
            InputError: no such sample.
        """
        if not 0 <= sample < self.n_samples:
            raise InputError(self.path, "sample", sample, f"0..{self.n_samples - 1}")
        return self.segments[bisect_right(self.segments, sample, key=lambda s: s.start) - 1]

    def time_at(self, sample: int) -> Instant | None:
        """UTC of a sample: from its segment's start time, else from an earlier one by global index.

        Raises:
            InputError: no such sample.
        """
        here = self.segment_at(sample)
        anchor = self._anchors[here.index]
        if anchor is None or anchor.datetime is None:
            return None
        ahead = here.global_index - anchor.global_index + sample - here.start
        return anchor.datetime.later(ahead, self.sample_rate)

    @cached_property
    def _anchors(self) -> tuple[Segment | None, ...]:
        """For each segment, the one whose start time tells its time: itself or an earlier one."""
        anchors: list[Segment | None] = []
        anchor: Segment | None = None
        reached = 0
        for segment in self.segments:
            if segment.datetime is not None:
                anchor = segment
            elif segment.global_index < reached:
                anchor = None  # another stream of samples
            anchors.append(anchor)
            reached = segment.global_index + segment.count
        return tuple(anchors)

    def blocks(
        self, block_size: int = DEFAULT_BLOCK, start: int = 0, stop: int | None = None
    ) -> Iterator[Block]:
        """Samples start..stop-1 in order, in blocks that never cross a segment.

        Every block has block_size samples per channel, except a segment's last. Memory is bounded
        by one block; the arrays given out are not reused.

        Raises:
            InputError: impossible range or block size; a file that changed or cannot be read.
        """
        stop = self.n_samples if stop is None else stop
        if block_size < 1:
            raise InputError(self.path, "block size", block_size, "at least 1")
        if not 0 <= start <= stop <= self.n_samples:
            found = f"samples {start}..{stop}"
            raise InputError(self.path, "range", found, f"a range within 0..{self.n_samples}")
        return self._blocks(block_size, start, stop)

    def _blocks(self, block_size: int, start: int, stop: int) -> Iterator[Block]:
        spans = [(max(s.start, start), min(s.stop, stop), s) for s in self.segments]
        spans = [span for span in spans if span[0] < span[1]]
        largest = max((b - a for a, b, _ in spans), default=0)
        frames = min(block_size, largest)
        with ExitStack() as stack:
            readers = [
                FrameReader(d, stack.enter_context(d.data.open()), frames) for d in self.datasets
            ]
            for first, last, segment in spans:
                for at in range(first, last, block_size):
                    yield self._read(readers, segment, at, min(block_size, last - at))

    def _read(self, readers: list[FrameReader], segment: Segment, start: int, count: int) -> Block:
        samples = np.empty((self.channels, count), np.complex64)
        clipped = np.zeros(self.channels, np.int64)
        invalid = np.zeros(self.channels, np.int64)
        # A segment lies within one run: runs are split wherever segments are.
        run = self.runs[bisect_right(self.runs, start, key=lambda r: r.start) - 1]
        row = 0
        for i, (reader, dataset) in enumerate(zip(readers, self.datasets, strict=True)):
            rows = slice(row, row + dataset.metadata.channels)
            at = run.starts[i] + start - run.start
            reader.read(at, samples[rows], clipped[rows], invalid[rows])
            row = rows.stop
        return Block(segment, start, samples, clipped, invalid)
