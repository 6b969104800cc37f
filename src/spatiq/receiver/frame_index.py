"""An index of a recording's frames, made piece by piece: the same as a single pass would find.

Each piece is searched by itself from its start. A piece's search ends in a state: scanning from
some lag, or just after a frame. Where the next piece's search was in the same state once, all that
it found from there on is what the single pass finds. Where it never was, the search goes on from
the piece before until it is. So the join is exact wherever the recording is cut; usually it costs
nothing.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from spatiq.link.description import Link
from spatiq.receiver.chain import chain_parts
from spatiq.receiver.expected_frames import FoundStart
from spatiq.receiver.frame_search import LAGS_PER_SYMBOL, Detection, last_lag
from spatiq.receiver.framing import Framing
from spatiq.receiver.options import ReceiverOptions
from spatiq.receiver.stretches import Find, ListedFrames, Place, SearchedStretch
from spatiq.recording.recording import Recording

_ROW = np.dtype(
    [
        ("segment", "i4"),
        ("lag", "i8"),
        ("carrier_bin", "i4"),
        ("metric", "f8"),
        ("since", "i8"),
        ("crossed", "i8"),
        ("entered", "?"),
    ]
)


@dataclass(frozen=True)
class Piece:
    """A piece of a recording to be searched: from a place up to a place (None: the end)."""

    start: Place
    stop: Place | None
    known: frozenset[tuple[int, int, int]] = frozenset()


@dataclass(frozen=True)
class PieceIndex:
    """What the search of a piece found.

    Attributes:
        finds: in order.
        end: where the search stands; None when the last segment it searched is done.
        tails: by segment, where the last scan, which met nothing, had begun.
    """

    finds: tuple[Find, ...]
    end: Place | None
    tails: dict[int, int]


class FindTable:
    """Finds of a whole recording, in order, kept as arrays: 40 bytes each."""

    def __init__(self, rows: NDArray[np.void] | None = None) -> None:
        self._rows = np.zeros(0, _ROW) if rows is None else rows
        self._parts: list[NDArray[np.void]] = []

    def add(self, finds: Sequence[Find]) -> None:
        """Append finds."""
        rows = [(f.segment, *_numbers(f.found), f.since, f.crossed, f.entered) for f in finds]
        self._parts.append(np.array(rows, _ROW))

    @property
    def rows(self) -> NDArray[np.void]:
        """One row for each find."""
        if self._parts:
            self._rows = np.concatenate([self._rows, *self._parts])
            self._parts = []
        return self._rows

    @property
    def count(self) -> int:
        """Number of finds."""
        return int(self.rows.size)

    @property
    def entered(self) -> NDArray[np.bool_]:
        """Whether the frame of each is whole."""
        return np.asarray(self.rows["entered"], np.bool_)

    def finds(self, low: int = 0, high: int | None = None) -> list[Find]:
        """Finds low..high-1."""
        return [
            Find(segment, Detection(lag, carrier_bin, metric), since, crossed, entered)
            for segment, lag, carrier_bin, metric, since, crossed, entered in self.rows[
                low:high
            ].tolist()
        ]


class FrameIndexer:
    """Searches pieces of one recording and joins them.

    Args:
        recording: opened recording.
        link: link description.
        options: how to receive.

    Raises:
        InputError: when the link cannot be received from this recording.
    """

    def __init__(self, recording: Recording, link: Link, options: ReceiverOptions) -> None:
        self._recording = recording
        self._link = link
        self._options = options
        self._parts = chain_parts(recording, link, options)
        self._sync = link.layout.sync.start
        self._spacing = self._parts.bank.samples_per_symbol / LAGS_PER_SYMBOL

    def pieces(self, cuts: Sequence[int]) -> list[Piece]:
        """Pieces between cuts, which are per-channel file samples in rising order.

        A cut where nothing can be searched any more, at a segment's end, counts for the next one's
        start; cuts that come to the same place count once.
        """
        places = [Place(0)]
        for cut in cuts:
            place = self._place(cut)
            if place is not None and (place.segment, place.lag) > (
                places[-1].segment,
                places[-1].lag,
            ):
                places.append(place)
        stops: list[Place | None] = [*places[1:], None]
        return [Piece(start, stop) for start, stop in zip(places, stops, strict=True)]

    def _place(self, cut: int) -> Place | None:
        segments = self._recording.segments
        if not 0 < cut < self._recording.n_samples:
            return None
        segment = self._recording.segment_at(cut)
        lag = int(np.ceil((cut - segment.start) / self._spacing))
        if lag <= last_lag(segment.count, self._parts.bank, self._parts.pattern):
            return Place(segment.index, lag)
        return Place(segment.index + 1) if segment.index + 1 < len(segments) else None

    def search(self, piece: Piece, on_read: Callable[[int], None] | None = None) -> PieceIndex:
        """Look for the frames of a piece; `on_read` is told how far the recording was read."""
        stretch = SearchedStretch(piece.start, piece.stop, piece.known)
        parts = self._parts
        Framing(
            self._recording,
            self._link,
            self._options,
            parts.bank,
            parts.tables,
            parts.pattern,
            on_read,
            stretch,
            parts.survey,
        ).search()
        return PieceIndex(tuple(stretch.finds), stretch.end, stretch.tails)

    def join(self, pieces: Sequence[Piece], found: Iterable[PieceIndex]) -> FindTable:
        """All finds, as of a single pass; searches on where two pieces do not meet.

        `found` holds one index for each piece, in order; only one is looked at a time.
        """
        table = FindTable()
        end: Place | None = None
        for piece, index in zip(pieces, found, strict=True):
            skipped: int | None = 0
            if end is not None:
                skipped = _meeting(end, index)
                if skipped is None:
                    on = self.search(_within_segment(end, piece, index))
                    table.add(on.finds)
                    end = on.end
                    skipped = _in_segment(index, piece.start.segment)
                    if end is not None and (skipped := _meeting(end, index)) is None:
                        continue  # nothing that this piece found is what the single pass finds
            table.add(index.finds[skipped:])
            end = index.end
        return table

    def share(self, table: FindTable, batches: int) -> list[tuple[int, int]]:
        """Bounds of shares of so many whole batches of a single pass, the last with the rest."""
        entered = np.flatnonzero(table.entered)
        each = batches * self.batch_size
        cuts = entered[each - 1 :: each] + 1
        if cuts.size and not table.entered[cuts[-1] :].any():
            cuts = cuts[:-1]  # what is left holds lost frames at most: it goes with the last batch
        bounds = [0, *cuts.tolist(), table.count]
        return list(pairwise(bounds))

    def frames(self, table: FindTable, low: int, high: int) -> ListedFrames:
        """The finds low..high-1, to be received as a share."""
        before = None if low == 0 else table.finds(low - 1, low)[0]
        return ListedFrames(
            finds=table.finds(low, high),
            first=low == 0,
            final=high == table.count,
            previous=None if before is None else self._seen(before),
            read_from=0 if before is None else self._read_from(before),
        )

    @property
    def batch_size(self) -> int:
        """Frames in a batch of a single pass."""
        parts = self._parts
        framing = Framing(
            self._recording, self._link, self._options, parts.bank, parts.tables, parts.pattern
        )
        return framing.batch_size

    def _seen(self, find: Find) -> FoundStart:
        segment = self._recording.segments[find.segment]
        start = segment.start + (find.found.lag - LAGS_PER_SYMBOL * self._sync) * self._spacing
        return FoundStart(segment, start, start - segment.start + segment.global_index)

    def _read_from(self, find: Find) -> int:
        """First sample that the matched filter of a frame's symbols touches, and a little before.

        From there on it matters whether samples are finite.
        """
        sps = self._parts.bank.samples_per_symbol
        first = self._seen(find).start + float(self._parts.tables.active[0]) * sps
        return max(int(first) - 2 * self._parts.bank.half - 8, 0)


def _numbers(found: Detection) -> tuple[int, int, float]:
    return found.lag, found.carrier_bin, found.metric


def _meeting(end: Place, index: PieceIndex) -> int | None:
    """How many of a piece's finds are not the single pass's; None where the two do not meet.

    `end` is where the single pass stands.
    """
    here = _in_segment(index, end.segment)
    if end.last is not None:
        wanted = (end.segment, end.last.lag, end.last.carrier_bin)
        keys = [find.key for find in index.finds[:here]]
        return keys.index(wanted) + 1 if wanted in keys else None
    for k, find in enumerate(index.finds[:here]):
        if find.crossed >= 0 and find.since <= end.lag <= find.crossed:
            return k
    tail = index.tails.get(end.segment)
    if tail is None or tail > end.lag:
        return None
    if index.end is not None and index.end.segment == end.segment and end.lag > index.end.lag:
        return None
    return here


def _in_segment(index: PieceIndex, segment: int) -> int:
    """How many of a piece's finds, which come in order, lie in its first segment."""
    return sum(find.segment == segment for find in index.finds)


def _within_segment(end: Place, piece: Piece, index: PieceIndex) -> Piece:
    """From where the single pass stands up to a find of the piece, to its stop at the latest."""
    stop = piece.stop
    if stop is None or stop.segment != end.segment:
        stop = Place(end.segment + 1)
    return Piece(end, stop, frozenset(f.key for f in index.finds if f.segment == end.segment))
