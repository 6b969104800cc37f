"""Frames that the link's frame period says were sent, and that were not found."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from spatiq.receiver.frame_batch import LostFrame
from spatiq.recording.placement import Segment

# A frame start is placed by its expected multiple of the period; half a period either way decides.
_MOST_LISTED = 1_000_000  # a wrong period must not fill the memory


@dataclass(frozen=True)
class FoundStart:
    """Start of a frame that was seen: its segment, file sample, and place in global index."""

    segment: Segment
    start: float
    global_position: float


def lost_between(
    segments: Sequence[Segment],
    before: FoundStart | None,
    after: FoundStart | None,
    period: float,
    span: tuple[float, float],
) -> list[LostFrame]:
    """Frames expected after `before` and ahead of `after`.

    Args:
        segments: of the recording.
        before, after: frames seen; None means the recording's start or end.
        period: nominal frame period in samples.
        span: first and last symbol sent, in samples from the frame's start.

    Returns:
        One entry per expected frame any symbol of which falls between the recording's first and
        last sample, in order of time, with its reason.
    """
    if before is None and after is None:
        return []
    positions: list[float] = []
    if before is not None and after is not None:
        steps = round((after.global_position - before.global_position) / period)
        if steps > 1:
            each = (after.global_position - before.global_position) / steps
            positions = [
                before.global_position + n * each for n in range(1, min(steps, _MOST_LISTED))
            ]
    elif before is not None:
        end = segments[-1].global_index + segments[-1].count
        n = 1
        while before.global_position + n * period + span[0] < end and n < _MOST_LISTED:
            positions.append(before.global_position + n * period)
            n += 1
    elif after is not None:
        first = segments[0].global_index
        n = 1
        while after.global_position - n * period + span[1] >= first and n < _MOST_LISTED:
            positions.append(after.global_position - n * period)
            n += 1
        positions.reverse()
    return [_lost(segments, p, span) for p in positions]


def _lost(segments: Sequence[Segment], position: float, span: tuple[float, float]) -> LostFrame:
    """Why was this one not found: cut off, in a gap, or simply not seen?"""
    begin, end = position + span[0], position + span[1]
    for segment in segments:
        first, stop = segment.global_index, segment.global_index + segment.count
        if end < first or begin >= stop:
            continue
        start = position - segment.global_index + segment.start
        if begin < first - 0.5:
            at_start = segment.index == 0
            reason = "cut off by the start" if at_start else "cut off by a gap"
        elif end > stop - 0.5:
            at_end = segment.index == len(segments) - 1
            reason = "cut off by the end" if at_end else "cut off by a gap"
        else:
            reason = "not found"
        return LostFrame(segment.index, start, -1, reason)
    before = max(
        (s for s in segments if s.global_index <= begin), key=lambda s: s.index, default=segments[0]
    )
    start = position - before.global_index + before.start
    return LostFrame(before.index, start, -1, "in a gap")
