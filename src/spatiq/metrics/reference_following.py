"""Which number did the transmitter give each frame? Counter, running reference and time tell.

The usual case costs one comparison: the next frame has the next number (or the number that the
frame period says). Where that does not fit, the frame is looked at by itself: its counter if its
CRC passes, or the place of its bits in the running reference.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from itertools import pairwise
from typing import Protocol

import numpy as np
import scipy.stats
from numpy.typing import NDArray

from spatiq.link.payload import PayloadFormat
from spatiq.link.payload_fields import CounterSource, FieldSpan, PrbsSource
from spatiq.metrics.reference_search import SIGNIFICANCE, PrbsSearch, agreement

# A number that neighbours or time suggest needs less evidence than one found by searching.
_CONFIRMATION = 1e-3
_TRIALS = 32  # frames missed in a row that are bridged without a search


@dataclass(frozen=True, eq=False)
class Numbering:
    """Frame numbers, int64 (F,), -1 where unknown, and whether each is known, bool (F,).

    `reference`: plain bits of the frames, (F, n_bits), when they were needed to find the numbers.
    """

    numbers: NDArray[np.int64]
    resolved: NDArray[np.bool_]
    reference: NDArray[np.uint8] | None = None


class Numberer(Protocol):
    """What numbers batches of frames in the order of time."""

    def number(
        self,
        plain: NDArray[np.uint8],
        crc_ok: NDArray[np.bool_] | None,
        position: NDArray[np.float64],
    ) -> Numbering:
        """See `ReferenceFollower.number`."""
        ...


@dataclass
class ReferenceFollower:
    """Numbers frames in the order of time; keeps the last one between batches.

    Attributes:
        payload: what the payload's bits are.
        period: frame period in samples; None when frames may come at any time.
        shortest: least distance of two frames' starts in samples.
    """

    payload: PayloadFormat
    period: float | None
    shortest: float
    _last: tuple[int, float] | None = None
    _pending: int = 0  # frames found after the last known one
    _dependent: NDArray[np.int64] = field(init=False)
    _most_wrong: int = field(init=False)
    _counter: FieldSpan | None = field(init=False)
    _search: PrbsSearch | None = field(init=False)
    _running: FieldSpan | None = field(init=False)
    _reference: NDArray[np.uint8] | None = field(init=False, default=None)

    def __post_init__(self) -> None:
        """Note which bits depend on the frame number."""
        spans = [
            s for s in self.payload.fields if s.is_running or isinstance(s.source, CounterSource)
        ]
        bits = [np.arange(s.start, s.stop) for s in spans]
        self._dependent = np.concatenate(bits) if bits else np.zeros(0, np.int64)
        count = self._dependent.size
        self._most_wrong = int(scipy.stats.binom.ppf(_CONFIRMATION, count, 0.5)) - 1
        self._counter = next((s for s in spans if isinstance(s.source, CounterSource)), None)
        self._running = next((s for s in spans if isinstance(s.source, PrbsSource)), None)
        self._search = None

    def number(
        self,
        plain: NDArray[np.uint8],
        crc_ok: NDArray[np.bool_] | None,
        position: NDArray[np.float64],
    ) -> Numbering:
        """Number a batch.

        Args:
            plain: descrambled bits as decided, (F, n_bits).
            crc_ok: (F,), or None when the link has no CRC.
            position: global sample position of each frame's start, (F,), ascending.
        """
        count = plain.shape[0]
        numbers = np.full(count, -1, np.int64)
        if not self._dependent.size:
            return Numbering(numbers, np.ones(count, np.bool_))
        self._reference = None
        before = -1 if self._last is None else self._last[0]
        i = 0
        while i < count:
            i = self._follow(plain, position, numbers, i)
            if i < count:
                numbers[i] = self._resolve(plain, crc_ok, position, i)
                if numbers[i] >= 0:
                    self._last = (int(numbers[i]), float(position[i]))
                i += 1
        numbers = self._filled(before, numbers)
        return Numbering(numbers, numbers >= 0, self._reference)

    def _filled(self, before: int, numbers: NDArray[np.int64]) -> NDArray[np.int64]:
        """Fill unknown numbers between known ones, the last of the batch before included."""
        pending = np.full(self._pending, -1, np.int64)
        whole = np.concatenate([np.array([before], np.int64), pending, numbers])
        fill_between(whole)
        known = np.flatnonzero(whole >= 0)
        self._pending = whole.size - 1 - int(known[-1]) if known.size else whole.size - 1
        return whole[whole.size - numbers.size :]

    def _expected(self, position: NDArray[np.float64]) -> NDArray[np.int64]:
        """Numbers after the last known one: by the period, else one more each time."""
        assert self._last is not None
        number, start = self._last
        if self.period is None:
            return number + 1 + np.arange(position.size, dtype=np.int64)
        steps = np.rint((position - start) / self.period).astype(np.int64)
        return number + np.maximum(steps, 1)

    def _follow(
        self,
        plain: NDArray[np.uint8],
        position: NDArray[np.float64],
        numbers: NDArray[np.int64],
        i: int,
    ) -> int:
        """Number frames from i on while expectation fits; returns the first that does not fit."""
        if self._last is None:
            return i
        expected = self._expected(position[i:])
        reference = self.payload.reference(expected)
        wrong = np.count_nonzero(
            reference[:, self._dependent] != plain[i:, self._dependent], axis=1
        )
        misfit = np.flatnonzero(wrong > self._most_wrong)
        fits = int(misfit[0]) if misfit.size else expected.size
        numbers[i : i + fits] = expected[:fits]
        self._reference = reference if fits == plain.shape[0] else None
        if fits:
            self._last = (int(expected[fits - 1]), float(position[i + fits - 1]))
        return i + fits

    def _resolve(
        self,
        plain: NDArray[np.uint8],
        crc_ok: NDArray[np.bool_] | None,
        position: NDArray[np.float64],
        i: int,
    ) -> int:
        """Number of one frame by its own evidence, else by time; -1 when there is none."""
        room = self._room(float(position[i]))
        by_counter = self._by_counter(plain, i, room)
        if by_counter is not None:
            trusted = crc_ok is not None and bool(crc_ok[i])
            if self._agrees(by_counter, plain[i]) and (trusted or self._running is not None):
                return by_counter
            following = i + 1 < plain.shape[0] and self._by_counter(plain, i + 1, room + 1)
            if self._running is None and following == by_counter + 1:
                return by_counter
        for find in (self._by_trial, self._by_search):
            found = find(plain[i], room)
            if found is not None:
                return found
        if self._last is not None and self.period is not None:
            return int(self._expected(position[i : i + 1])[0])
        return -1

    def _agrees(self, number: int, bits: NDArray[np.uint8]) -> bool:
        dependent = self._dependent
        if self._running is not None:
            dependent = np.arange(self._running.start, self._running.stop)
        reference = self.payload.reference(np.array([number]))[0, dependent]
        wrong = int(np.count_nonzero(reference != bits[dependent]))
        return self._running is None or agreement(wrong, dependent.size) < SIGNIFICANCE

    def _by_counter(self, plain: NDArray[np.uint8], i: int, room: int) -> int | None:
        """Frame number that the counter shows, lifted past the last known one."""
        if self._counter is None or not isinstance(self._counter.source, CounterSource):
            return None
        values = self.payload.counter(plain[i : i + 1])
        if values is None:
            return None
        modulus = 1 << self._counter.width
        shown = (int(values[0]) - self._counter.source.start) % modulus
        return self._lift(shown, modulus, room)

    def _room(self, position: float) -> int:
        """Most frames that can have begun after the last known one, up to this place."""
        if self._last is None:
            return 0
        return int((position - self._last[1]) / self.shortest) + 1

    def _lift(self, number: int, modulus: int, room: int) -> int:
        """Smallest number of that residue after the last known one, if time leaves room for it.

        Otherwise the number as it is: the transmitter has begun anew, or the last one was wrong.
        """
        if self._last is None or number > self._last[0]:
            return number
        lifted = number + -(-(self._last[0] + 1 - number) // modulus) * modulus
        return lifted if lifted - self._last[0] <= room else number

    def _by_trial(self, bits: NDArray[np.uint8], room: int) -> int | None:
        """One of the next numbers, where a few frames were missed; survives more errors than a
        search."""
        if self._last is None or self._running is None:
            return None
        numbers = self._last[0] + 1 + np.arange(min(room, _TRIALS), dtype=np.int64)
        span = slice(self._running.start, self._running.stop)
        wrong = np.count_nonzero(self.payload.reference(numbers)[:, span] != bits[span], axis=1)
        best = int(np.argmin(wrong))
        chance = agreement(int(wrong[best]), self._running.width) * _TRIALS
        return int(numbers[best]) if chance < SIGNIFICANCE else None

    def _by_search(self, bits: NDArray[np.uint8], room: int) -> int | None:
        span = self._running
        if span is None or not isinstance(span.source, PrbsSource):
            return None
        if self._search is None:
            self._search = PrbsSearch(span.source.prbs, span.width)
        found = self._search.frame_number(bits[span.start : span.stop])
        return None if found is None else self._lift(found, self._search.modulus, room)


def fill_between(numbers: NDArray[np.int64]) -> None:
    """Number frames that have no evidence of their own, where their neighbours leave one choice.

    numbers: int64 (F,), -1 where unknown; filled in place. A run of unknown frames between two
    known ones has one numbering when exactly as many numbers are free as there are frames.
    """
    known = np.flatnonzero(numbers >= 0)
    for before, after in pairwise(known):
        if after > before + 1 and numbers[after] - numbers[before] == after - before:
            numbers[before:after] = numbers[before] + np.arange(after - before)
