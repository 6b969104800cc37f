"""Framing: sync sections become frames, cut out of the recording and gathered into batches.

Search and framing take turns: after a frame, the next sync section is looked for where the link
says that it may follow, first where it is expected, then anywhere. What was expected and is not
there is listed with its reason.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spatiq.link.description import Link
from spatiq.receiver.cleaning import Cleaning
from spatiq.receiver.expected_frames import FoundStart, lost_between
from spatiq.receiver.frame_batch import (
    NOT_FINITE,
    NOT_FOUND,
    FrameBatch,
    LostFrame,
    empty_batch,
)
from spatiq.receiver.frame_search import (
    LAGS_PER_SYMBOL,
    Detection,
    FrameSearch,
    SyncPattern,
    first_needed,
)
from spatiq.receiver.framing_kernels import cut_window
from spatiq.receiver.front_end_survey import Survey
from spatiq.receiver.link_tables import LinkTables
from spatiq.receiver.matched_filter import FilterBank, derotate
from spatiq.receiver.options import ReceiverOptions
from spatiq.receiver.sample_stream import SampleStream
from spatiq.receiver.spoiled_samples import SpoiledSamples
from spatiq.receiver.stretches import Find, Place, Stretch, WholeRecording
from spatiq.receiver.sync_likeness import likeness_ends
from spatiq.recording.placement import Segment
from spatiq.recording.recording import Recording

_BATCH_BYTES = 16 << 20  # of samples: enough frames to make Python's cost vanish, and bounded
_BATCH_FRAMES = 512


@dataclass(frozen=True)
class FrameGeometry:
    """Sizes in symbol periods and samples that follow from link and options.

    Attributes:
        length: K.
        guard: symbol periods kept on either side, for clock offsets.
        window: samples cut out for a frame.
        half: matched-filter reach, samples.
        samples_per_symbol: nominal.
    """

    length: int
    guard: int
    window: int
    half: int
    samples_per_symbol: float


def frame_geometry(link: Link, bank: FilterBank, options: ReceiverOptions) -> FrameGeometry:
    """Windows large enough for the frame at twice the expected clock offset."""
    length = link.layout.length
    guard = 1 + skew(bank.samples_per_symbol) + int(np.ceil(length * options.max_clock_ppm * 2e-6))
    span = int(np.ceil((length + 2 * guard) * bank.samples_per_symbol))
    window = span + 2 * bank.half + 4
    return FrameGeometry(length, guard, window, bank.half, bank.samples_per_symbol)


def skew(samples_per_symbol: float) -> int:
    """Symbol periods by which the search may take a frame early or late.

    Half the range of t0, or receive channels four samples apart, of which it found one.
    """
    return max(1, int(np.ceil(4.0 / samples_per_symbol)))


def clip_levels(recording: Recording) -> tuple[float, float]:
    """Component values at or beyond which a sample counts as clipped; infinite when unknown."""
    if not recording.clipping_known:
        return -np.inf, np.inf
    lows, highs = [], []
    for dataset in recording.datasets:
        kind = dataset.metadata.sample_type
        low, high = kind.range_ends
        lows.append((low - kind.offset) / kind.full_scale)
        highs.append((high - kind.offset) / kind.full_scale)
    return max(lows), min(highs)


class Framing:
    """The stage: a recording in, batches of frames out, in the order of time."""

    def __init__(
        self,
        recording: Recording,
        link: Link,
        options: ReceiverOptions,
        bank: FilterBank,
        tables: LinkTables,
        pattern: SyncPattern,
        on_read: Callable[[int], None] | None = None,
        stretch: Stretch | None = None,
        survey: Survey | None = None,
    ) -> None:
        self._recording = recording
        self._on_read = on_read
        self._stretch: Stretch = stretch if stretch is not None else WholeRecording()
        self._link = link
        self._options = options
        self._bank = bank
        self._tables = tables
        self._pattern = pattern
        self._geometry = frame_geometry(link, bank, options)
        self._skipped = self._searched_from()
        self._clip = clip_levels(recording)
        survey = survey or Survey(np.zeros(recording.channels, np.complex128))
        inverted = options.spectrum == "inverted"
        self._cleaning = Cleaning(survey, self._clip, inverted)
        self._band = survey.band.inverted() if survey.band and inverted else survey.band
        self._spoiled = SpoiledSamples(2 * bank.half)
        frame_bytes = recording.channels * 2 * self._geometry.window * 4
        self._batch_size = max(1, min(_BATCH_FRAMES, _BATCH_BYTES // frame_bytes))
        # One array for all batches: fresh memory would cost as much as the filter.
        shape = (self._batch_size, recording.channels, 2, self._geometry.window)
        self._planes = np.empty(shape, np.float32)

    def __iter__(self) -> Iterator[FrameBatch]:
        """Batches of at most a few hundred frames; the last may hold lost frames only."""
        batch, count = self._new_batch(), 0
        previous = self._stretch.previous
        for segment in filter(self._stretch.covers, self._recording.segments):
            for found, start in self._segment(segment):
                here = None
                if start is not None:
                    position = start - segment.start + segment.global_index
                    here = FoundStart(segment, start, position)
                    batch.lost += self._missing(previous, here)
                    self._spoiled.forget(self._reach(start)[0])
                    previous = here
                if isinstance(found, LostFrame):
                    batch.lost.append(found)
                    continue
                self._enter(batch, count, segment, *found)
                count += 1
                if count == self._batch_size:
                    yield batch
                    batch, count = self._new_batch(), 0
        if self._stretch.final:
            last = _first_frames(batch, count)
            last.final = True
            yield last

    @property
    def batch_size(self) -> int:
        """Frames in a full batch: depends on the link and the number of channels alone."""
        return self._batch_size

    def search(self) -> None:
        """Look for all frames of the stretch, which keeps what is found; cut none out."""
        for segment in filter(self._stretch.covers, self._recording.segments):
            for _, start in self._segment(segment):
                if start is not None:
                    self._spoiled.forget(self._reach(start)[0])

    def _new_batch(self) -> FrameBatch:
        return empty_batch(
            self._planes,
            self._link.antennas,
            self._tables.active.size,
            self._link.layout.payload_index.size,
            self._link.words_per_frame,
        )

    def _missing(self, before: FoundStart | None, after: FoundStart) -> list[LostFrame]:
        if self._link.period_symbols is None or before is None:
            return []
        period = self._link.period_symbols * self._geometry.samples_per_symbol
        active = self._tables.active
        sps = self._geometry.samples_per_symbol
        span = (float(active[0]) * sps, float(active[-1]) * sps)
        lost = lost_between(self._recording.segments, before, after, period, span)
        return [
            replace(f, reason=NOT_FINITE) if f.reason == NOT_FOUND and self._is_spoiled(f) else f
            for f in lost
        ]

    def _reach(self, start: float) -> tuple[float, float]:
        """First and last sample that the matched filter of a frame's symbols touches."""
        sps, half, active = self._bank.samples_per_symbol, self._bank.half, self._tables.active
        return start + active[0] * sps - half, start + active[-1] * sps + half

    def _is_spoiled(self, frame: LostFrame) -> bool:
        return self._spoiled.within(*self._reach(frame.start_sample))

    def _segment(
        self, segment: Segment
    ) -> Iterator[tuple[tuple[Detection, NDArray[np.float32]] | LostFrame, float | None]]:
        """Frames of one segment: what was found, and the start of a frame in file samples."""
        sync = self._link.layout.sync.start
        lead = sync + 2 * self._geometry.guard
        band = self._band
        if band is not None:
            lead += int(np.ceil(band.reach / self._geometry.samples_per_symbol))
        place, begin = self._stretch.begin(segment)
        if place.last is not None:
            place = self._after(segment, place.last)
        if begin is None:
            begin = first_needed(segment, place.lag, self._bank, self._pattern, lead)
        stream = self._stream(segment, begin)
        search = FrameSearch(stream, self._bank, self._pattern, lead, band)
        spacing = self._geometry.samples_per_symbol / LAGS_PER_SYMBOL
        while True:
            found, crossed = self._stretch.next(search, place, self._expected)
            if found is None:
                break
            start = segment.start + (found.lag - LAGS_PER_SYMBOL * sync) * spacing
            reason = self._cut_off(segment, start)
            window = self._first_sample(start)
            samples = stream.planes(window, window + self._geometry.window)
            if not reason and self._spoiled.within(*self._reach(start)):
                reason = NOT_FINITE
            if reason:
                yield LostFrame(segment.index, start, -1, reason), start
            else:
                yield (found, samples), start
            self._stretch.see(Find(segment.index, found, place.lag, crossed, not reason))
            place = self._after(segment, found)
            search.release(place.lag)

    def _stream(self, segment: Segment, begin: int) -> SampleStream:
        """Samples of a segment, read from `begin` on."""
        cleaning, channels = self._cleaning, self._recording.channels
        begin = cleaning.begin(segment, begin)
        size = cleaning.block_size(self._options.block_size)
        read = self._recording.blocks(size, begin, segment.stop)
        blocks = cleaning.blocks(read, segment, begin)
        return SampleStream(
            blocks, segment.start, segment.stop, channels, self._spoiled, self._on_read, begin
        )

    def _after(self, segment: Segment, found: Detection) -> Place:
        """Where the search goes on after a frame: it depends on this frame alone."""
        return Place(segment.index, found.lag + LAGS_PER_SYMBOL * self._skipped, found)

    def _searched_from(self) -> int:
        """Symbol periods behind a sync section's start at which the search goes on.

        Where a period says when the next one comes, and it does not come, something is amiss: it
        may come earlier by all the samples that were lost, so that the search goes on behind the
        last known symbols like the sync section. Otherwise a frame is as long as it should be.
        """
        drift = int(np.ceil(self._geometry.length * self._options.max_clock_ppm * 1e-6))
        drift += skew(self._geometry.samples_per_symbol)
        whole = max(self._geometry.length - drift, 1)
        if self._link.period_symbols is None or self._pattern.ambiguous:
            return whole
        return min(likeness_ends(self._link, self._pattern), whole)

    def _expected(self, search: FrameSearch, last: Detection | None) -> Detection | None:
        """A frame where one is expected after the last one; None when there is none.

        A side lobe of the next frame may lie where it is expected: only a scan compares the two.
        """
        if last is None or self._pattern.ambiguous:
            return None
        period = self._link.period_symbols or float(self._geometry.length)
        drift = 1 + int(np.ceil(period * self._options.max_clock_ppm * 1e-6))
        expected = last.lag + round(LAGS_PER_SYMBOL * period)
        return search.near(expected, last.carrier_bin, LAGS_PER_SYMBOL * drift)

    def _first_sample(self, start: float) -> int:
        geometry = self._geometry
        margin = geometry.guard * geometry.samples_per_symbol
        return int(np.floor(start - margin)) - geometry.half

    def _cut_off(self, segment: Segment, start: float) -> str:
        sps = self._geometry.samples_per_symbol
        active = self._tables.active
        if start + active[0] * sps < segment.start - 0.5:
            return "cut off by the start" if segment.index == 0 else "cut off by a gap"
        if start + active[-1] * sps > segment.stop - 0.5:
            last = segment.index == len(self._recording.segments) - 1
            return "cut off by the end" if last else "cut off by a gap"
        return ""

    def _enter(
        self,
        batch: FrameBatch,
        i: int,
        segment: Segment,
        found: Detection,
        samples: NDArray[np.float32],
    ) -> None:
        """Copy a frame's window into the batch and remove the carrier that the search saw."""
        sps = self._geometry.samples_per_symbol
        sync = self._link.layout.sync.start
        start = segment.start + (found.lag / LAGS_PER_SYMBOL - sync) * sps
        first = self._first_sample(start)
        inside = (int(start - first), int(start - first + self._geometry.length * sps) + 1)
        batch.clipped[i] = cut_window(samples, batch.planes[i], *self._clip, *inside)
        if self._cleaning.active:
            batch.clipped[i] = self._cleaning.clipped(first + inside[0], first + inside[1])
        if self._cleaning.survey.lines:
            lines = self._cleaning.taken(segment, first, first + samples.shape[2])
            count = lines[0].size
            batch.line_frequency[i, :count], batch.line_power[i, :count] = lines
        batch.first_sample[i] = first
        batch.segment[i] = segment.index
        batch.sync_metric[i] = found.metric
        batch.t0[i] = start - first
        batch.search_t0[i] = start - first
        batch.step[i] = sps
        batch.carrier[i] = self._pattern.carrier(found.carrier_bin) / sps
        origin = batch.t0[i] + self._tables.header_centroid * sps
        derotate(batch.planes[i], batch.carrier[i], origin)
        batch.turns[i] = batch.carrier[i] * origin


def _first_frames(batch: FrameBatch, count: int) -> FrameBatch:
    """The first `count` frames of a batch that did not fill."""
    cut: dict[str, Any] = {
        name: value[:count] for name, value in vars(batch).items() if isinstance(value, np.ndarray)
    }
    return FrameBatch(**cut, lost=batch.lost)
