"""Frames that the link's frame period says were sent, and that were not found."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from spatiq.receiver.frame_batch import NOT_FOUND, LostFrame
from spatiq.recording.placement import Segment

_MOST_LISTED = 1_000_000  # a wrong period must not fill the memory
_LATE = 1 / 16  # of a period: what frames may come late by without one between them being missed
_DRIFT = 1e-4  # of the time passed, for the clocks


@dataclass(frozen=True)
class FoundStart:
    """Start of a frame that was seen: its segment, file sample, and place in global index."""

    segment: Segment
    start: float
    global_position: float


def lost_between(
    segments: Sequence[Segment],
    before: FoundStart,
    after: FoundStart,
    period: float,
    span: tuple[float, float],
) -> list[LostFrame]:
    """Frames expected after `before` and ahead of `after`, in order of time, with reasons.

    Samples lost untold bring frames nearer to each other, never further apart: a distance between
    two multiples of the period stands for the larger one. A frame may come late all the same: by
    `_LATE` of a period, and by `_DRIFT` of the time passed.

    Args:
        segments: of the recording.
        before, after: frames seen, one after the other.
        period: nominal frame period in samples.
        span: first and last symbol sent, in samples from the frame's start.
    """
    distance = after.global_position - before.global_position
    count = distance / period
    steps = math.ceil(count - min(_LATE + _DRIFT * count, 0.5))
    numbers = range(1, min(steps, _MOST_LISTED))
    each = distance / max(steps, 1)
    if each < period * (1.0 - _LATE):
        each = period  # where samples were lost, nobody knows: frames stand where they should
    return [_lost(segments, before.global_position + n * each, span) for n in numbers]


def _lost(segments: Sequence[Segment], position: float, span: tuple[float, float]) -> LostFrame:
    """Why was this one not found: cut off by a gap, in one, or simply not seen?"""
    begin, end = position + span[0], position + span[1]
    for segment in segments:
        first, stop = segment.global_index, segment.global_index + segment.count
        if end < first or begin >= stop:
            continue
        start = position - segment.global_index + segment.start
        inside = begin >= first - 0.5 and end <= stop - 0.5
        return LostFrame(segment.index, start, -1, NOT_FOUND if inside else "cut off by a gap")
    earlier = [s for s in segments if s.global_index <= begin]
    before = earlier[-1] if earlier else segments[0]
    return LostFrame(before.index, position - before.global_index + before.start, -1, "in a gap")
