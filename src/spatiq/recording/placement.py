"""From captures to places: which bytes hold which frames, and where the samples are contiguous."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from fractions import Fraction
from itertools import pairwise

from spatiq.errors import InputError
from spatiq.recording.metadata import Capture, Metadata
from spatiq.recording.times import Instant

# Start times of neighbouring captures without core:global_index: a host's time stamps are late by
# up to tens of milliseconds, which is no gap; a recorder that was stopped and started shows more.
_STAMP_TOLERANCE = Fraction(1, 10)


@dataclass(frozen=True)
class Segment:
    """A maximal run of samples that are contiguous in time and on one carrier.

    Attributes:
        index: number of the segment, from 0.
        start: first sample, per channel, counted over the recording.
        count: samples per channel.
        global_index: index of the first sample in the original stream; a larger step in it than in
            `start` is a gap.
        datetime: start time in UTC (exact), None when not stated.
        frequency: carrier in Hz, None when not stated.
    """

    index: int
    start: int
    count: int
    global_index: int
    datetime: Instant | None
    frequency: float | None

    @property
    def stop(self) -> int:
        """One past the last sample."""
        return self.start + self.count


@dataclass(frozen=True)
class Extent:
    """Frames that lie side by side in the file: `count` of them from frame `start`, at `byte`."""

    start: int
    count: int
    byte: int


@dataclass(frozen=True)
class Placement:
    """Where a data file's frames are.

    Attributes:
        extents: ascending; they tile frames 0..n-1.
        segments: ascending; they tile frames 0..n-1.
        indexed: True when every capture that has samples stated its core:global_index.
        warnings: one line each.
    """

    extents: tuple[Extent, ...]
    segments: tuple[Segment, ...]
    indexed: bool
    warnings: tuple[str, ...]


def place(metadata: Metadata, size: int, label: str) -> Placement:
    """Lay the captures over a data file of `size` bytes.

    Segment k starts at the headers of segments 0..k plus its frames times the frame size. Captures
    that point at no samples are left out; a partial frame at the end is left out with a warning.

    Raises:
        InputError: no whole frame in the file.
    """
    frame = metadata.channels * metadata.sample_type.sample_bytes
    limit = size - metadata.trailing_bytes
    captures, warnings = _with_lead(metadata)
    extents: list[Extent] = []
    kept: list[Capture] = []
    headers, left_over = 0, 0
    for k, capture in enumerate(captures):
        headers += capture.header_bytes
        byte = headers + capture.start * frame
        count = available = max(0, limit - byte) // frame
        if k < len(captures) - 1:
            count = min(captures[k + 1].start - capture.start, available)
        if count:
            kept.append(capture)
            extents.append(Extent(capture.start, count, byte))
        if count == available:
            # The file ends here: in this segment, or before it.
            left_over = max(0, limit - byte - count * frame)
            break
    empty = len(captures) - len(kept)
    if not kept:
        found = f"{size} bytes, of which {max(limit - headers, 0)} are for samples"
        expected = f"at least one frame of {frame} bytes ({metadata.channels} channels of "
        raise InputError(label, "", found, expected + f"{metadata.sample_type.name})")
    stated = metadata.captures[0].start
    if stated and len(kept) == 1 and kept[0] is captures[0]:
        field = "captures[0].core:sample_start"
        raise InputError(
            metadata.source,
            field,
            stated,
            f"an index below the {extents[0].count} samples there are",
        )
    if empty:
        warnings.append(f"{metadata.source}: captures that point at no samples: {empty}; ignored")
    if left_over:
        warnings.append(
            f"{label}: {left_over} bytes after the last whole frame of {frame} bytes are left out"
        )
    segments, remarks = _merge(kept, extents, metadata)
    indexed = all(c.indexed for c in kept)
    return Placement(tuple(extents), segments, indexed, (*warnings, *remarks))


def _with_lead(metadata: Metadata) -> tuple[list[Capture], list[str]]:
    """The captures, preceded by one for frames that stand before the first of them."""
    first = metadata.captures[0]
    if first.start == 0:
        return list(metadata.captures), []
    lead = Capture(0, 0, metadata.index_base, False, None, None)
    warning = f"{metadata.source}: no capture says anything of the first {first.start} samples"
    return [lead, *metadata.captures], [warning]


def _merge(
    captures: Sequence[Capture], extents: Sequence[Extent], metadata: Metadata
) -> tuple[tuple[Segment, ...], list[str]]:
    segments: list[Segment] = []
    jumps = 0
    for k, (capture, extent) in enumerate(zip(captures, extents, strict=True)):
        if k:
            before = captures[k - 1]
            jumped = _time_jumps(before, capture, metadata.sample_rate)
            jumps += jumped
            step = capture.start - before.start
            indexed = capture.global_index - before.global_index == step
            if indexed and capture.frequency == before.frequency and not jumped:
                segments[-1] = replace(segments[-1], count=segments[-1].count + extent.count)
                continue
        segments.append(
            Segment(
                index=len(segments),
                start=extent.start,
                count=extent.count,
                global_index=capture.global_index,
                datetime=capture.datetime,
                frequency=capture.frequency,
            )
        )
    warnings = []
    if jumps:
        warnings.append(
            f"{metadata.source}: {jumps} captures without core:global_index start at a time that "
            "does not follow on the samples before; taken as gaps of unknown length"
        )
    back = sum(b.global_index < a.global_index + a.count for a, b in pairwise(segments))
    if back:
        warnings.append(f"{metadata.source}: core:global_index steps back {back} times")
    return tuple(segments), warnings


def _time_jumps(before: Capture, after: Capture, rate: float) -> bool:
    """True when stated start times show a gap that nothing else can tell."""
    if after.indexed or before.datetime is None or after.datetime is None:
        return False
    expected = before.datetime.later(after.start - before.start, rate)
    return abs(after.datetime.seconds - expected.seconds) > _STAMP_TOLERANCE
