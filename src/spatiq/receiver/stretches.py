"""Which part of a recording's frames a pass is after: all, those of a stretch, or listed ones.

A single pass searches from each segment's start. To share one recording out, stretches of it are
searched apart and the finds joined (frame_index.py); then each worker cuts out its share of the
listed frames. After a frame, where the search goes on depends on that frame alone; while it scans,
on nothing but the place: that is why finds can be joined exactly.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Protocol

from spatiq.receiver.expected_frames import FoundStart
from spatiq.receiver.frame_search import Detection, FrameSearch
from spatiq.recording.placement import Segment

Expected = Callable[[FrameSearch, Detection | None], Detection | None]


@dataclass(frozen=True)
class Place:
    """Where a search stands within a segment.

    Attributes:
        segment: index of the segment.
        lag: where it scans on, half symbol periods from the segment's start.
        last: the frame it comes from and has not left yet; None while it scans.
    """

    segment: int
    lag: int = 0
    last: Detection | None = None


@dataclass(frozen=True)
class Find:
    """A sync section found: the scan for it began at `since` and met the threshold at `crossed`.

    `crossed` is -1 where it was found at the place expected, without a scan. `entered` says whether
    its frame is whole; otherwise it is listed as lost.
    """

    segment: int
    found: Detection
    since: int
    crossed: int
    entered: bool = True

    @property
    def key(self) -> tuple[int, int, int]:
        """Segment, lag and carrier bin: where the search goes on depends on these alone."""
        return self.segment, self.found.lag, self.found.carrier_bin


class Stretch(Protocol):
    """What framing asks of one."""

    first: bool  # it begins with the recording
    final: bool  # it ends with the recording
    previous: FoundStart | None  # the frame seen before its first one

    def covers(self, segment: Segment) -> bool:
        """Whether any of the segment belongs to it."""
        ...

    def begin(self, segment: Segment) -> tuple[Place, int | None]:
        """Where search begins, and the first sample needed (None: the search's own reach)."""
        ...

    def next(
        self, search: FrameSearch, place: Place, expected: Expected
    ) -> tuple[Detection | None, int]:
        """The next sync section, and the lag where a scan met it (-1: it was expected there)."""
        ...

    def see(self, find: Find) -> None:
        """Told of each sync section once its frame has been cut out or listed as lost."""
        ...


class WholeRecording:
    """All frames: a single pass."""

    first = True
    final = True
    previous: FoundStart | None = None

    def covers(self, segment: Segment) -> bool:
        """See Stretch."""
        return True

    def begin(self, segment: Segment) -> tuple[Place, int | None]:
        """See Stretch."""
        return Place(segment.index), segment.start

    def next(
        self, search: FrameSearch, place: Place, expected: Expected
    ) -> tuple[Detection | None, int]:
        """Where a frame is expected after the last one; failing that, wherever one is."""
        found = expected(search, place.last)
        return (found, -1) if found is not None else (search.scan(place.lag), 0)

    def see(self, find: Find) -> None:
        """See Stretch."""


@dataclass
class SearchedStretch:
    """Searches from a place up to a lag of a segment, and keeps what it found.

    Attributes:
        start: where the search begins.
        stop: where it ends: it scans no further, but follows a frame across. None: the end.
        known: keys of finds at any of which it ends, too.
        finds: what was found, in order.
        end: where the search stands in the end; None: the last segment it had to search is done.
        tails: by segment, the lag at which the last scan, which met nothing, had begun.
    """

    start: Place
    stop: Place | None
    known: frozenset[tuple[int, int, int]] = frozenset()
    finds: list[Find] = field(default_factory=list)
    end: Place | None = None
    tails: dict[int, int] = field(default_factory=dict)
    first: bool = False
    final: bool = False
    previous: FoundStart | None = None
    _over: bool = False

    def covers(self, segment: Segment) -> bool:
        """See Stretch."""
        if self._over or segment.index < self.start.segment:
            return False
        if self.stop is None:
            return True
        last = self.stop.segment if self.stop.lag else self.stop.segment - 1
        return segment.index <= last

    def begin(self, segment: Segment) -> tuple[Place, int | None]:
        """See Stretch."""
        if segment.index == self.start.segment and (self.start.lag or self.start.last):
            return self.start, None
        return Place(segment.index), segment.start

    def next(
        self, search: FrameSearch, place: Place, expected: Expected
    ) -> tuple[Detection | None, int]:
        """As a single pass, up to the stop."""
        if self._over:
            return None, -1
        stop = self.stop
        before = stop.lag if stop is not None and stop.segment == place.segment else None
        across = before is not None and place.lag >= before
        found = expected(search, place.last)
        if found is not None:
            self._over = across
            return found, -1
        found = None if across else search.scan(place.lag, before)
        if found is None:
            self.tails[place.segment] = place.lag
            if before is not None:
                self._over = True
                self.end = Place(place.segment, max(place.lag, before))
        return found, search.crossed

    def see(self, find: Find) -> None:
        """Keep it; end here if it is one that is known."""
        self.finds.append(find)
        self._over = self._over or find.key in self.known
        if self._over:
            self.end = Place(find.segment, 0, find.found)


@dataclass
class ListedFrames:
    """Frames whose sync sections were found before.

    Attributes:
        finds: in order.
        first, final: whether the recording's first and last frames are among them.
        previous: the frame seen before the first of them.
        read_from: first sample to be read of the segment that `previous` lies in.
    """

    finds: list[Find]
    first: bool
    final: bool
    previous: FoundStart | None
    read_from: int = 0
    _at: int = 0

    def covers(self, segment: Segment) -> bool:
        """See Stretch."""
        earliest = 0 if self.previous is None else self.previous.segment.index
        return bool(self.finds) and earliest <= segment.index <= self.finds[-1].segment

    def begin(self, segment: Segment) -> tuple[Place, int | None]:
        """See Stretch."""
        here = self.previous is not None and self.previous.segment.index == segment.index
        return Place(segment.index), max(segment.start, self.read_from) if here else segment.start

    def next(
        self, search: FrameSearch, place: Place, expected: Expected
    ) -> tuple[Detection | None, int]:
        """The next on the list; samples in between are passed over, what is odd in them noted."""
        if self._at == len(self.finds):
            return None, -1
        find = self.finds[self._at]
        if find.segment != place.segment:
            search.pass_over(None)
            return None, -1
        search.pass_over(find.found.lag)
        self._at += 1
        return find.found, find.crossed

    def see(self, find: Find) -> None:
        """See Stretch."""
