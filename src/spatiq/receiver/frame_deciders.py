"""How the words of a whole frame are decided: as runs of periods, or block by block."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from spatiq.link.blocks import BlockRun
from spatiq.receiver.block_detection import BlockDetector
from spatiq.receiver.dispersive_acquisition import KnownSymbolFit
from spatiq.receiver.dispersive_plan import DispersivePlan
from spatiq.receiver.dispersive_tracking import CarrierTrack, RunDetector, track_frame
from spatiq.receiver.fir_channel import Complex, FirChannel, convolved

# (first period, period after the last, channel to decide these with).
Part = tuple[int, int, FirChannel]


class FrameDecider(Protocol):
    """Decides frames of one plan. Words are those of the payload, int64 (Kp,)."""

    def track(
        self, received: Complex, fit: KnownSymbolFit
    ) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
        """First look: words, and carrier phase (K,), of vectors received (K, Nr)."""
        ...

    def decide(
        self, received: Complex, parts: list[Part], noise: float, words: NDArray[np.int64]
    ) -> NDArray[np.int64]:
        """Words anew, from vectors without carrier phase (K, Nr) and the words so far."""
        ...


@dataclass(frozen=True, eq=False)
class RunDecider:
    """Payload in runs: symbols reach from each word into those that follow.

    Attributes:
        plan: the link.
        detect: decides runs.
        walk: variance of the phase's random walk per period.
    """

    plan: DispersivePlan
    detect: RunDetector
    walk: float

    def track(
        self, received: Complex, fit: KnownSymbolFit
    ) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
        """See `track_frame`."""
        words, phase = track_frame(received, fit, self.plan, self.detect, self.walk)
        return words[self.plan.payload], phase

    def decide(
        self, received: Complex, parts: list[Part], noise: float, words: NDArray[np.int64]
    ) -> NDArray[np.int64]:
        """Words of each part, together with some around it that are decided with their own."""
        plan, periods = self.plan, self.plan.amplitude.size
        before = plan.vectors(words)
        found = np.full(periods, -1, np.int64)
        for begin, end, channel in parts:
            window = channel.window
            margin = 2 * window.memory + 8
            run = np.arange(max(begin - margin, 0), min(end + margin, periods))
            around = before.copy()
            around[run] = plan.known[run]
            left = received - convolved(around, channel.taps, window)
            arguments = (channel.taps, window, noise, plan.amplitude[run], None)
            decided = self.detect(left[run], *arguments)
            inside = (run >= begin) & (run < end)
            found[run[inside]] = decided[inside]
        return found[plan.payload]


@dataclass(frozen=True, eq=False)
class _Block:
    """A block: section, first period of its body, its words' places in the payload, factor."""

    run: BlockRun
    body: int
    slots: NDArray[np.int64]
    amplitude: float


@dataclass(frozen=True, eq=False)
class BlockDecider:
    """Payload in blocks with guards: each block is decided by itself.

    Attributes:
        plan: the link.
        detect: decides blocks.
        walk: variance of the phase's random walk per period.
    """

    plan: DispersivePlan
    detect: BlockDetector
    walk: float

    def track(
        self, received: Complex, fit: KnownSymbolFit
    ) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
        """Block after block; each corrects carrier and phase for those that follow."""
        plan, channel = self.plan, fit.channel
        periods = plan.amplitude.size
        track = CarrierTrack.begin(fit, plan, self.walk)
        words = np.full(plan.payload.size, -1, np.int64)
        known = self._known(channel)
        phase = track.phases(np.arange(periods))
        for block in self._blocks():
            body = block.body
            if body > plan.rows[0]:
                track.advance(float(body))
                ahead = np.arange(max(body + channel.window.first, 0), periods)
                phase[ahead] = track.phases(ahead)
            turned = received * np.exp(-1j * phase)[:, None]
            words[block.slots] = self._words(turned - known, channel, block)
            if body > plan.rows[0]:
                seen = np.arange(body, body + block.run.length)
                reference = convolved(plan.vectors(words), channel.taps, channel.window)
                track.observe(seen, turned[seen], reference[seen], channel.noise)
                ahead = np.arange(body, periods)
                phase[ahead] = track.phases(ahead)
        return words, phase

    def decide(
        self, received: Complex, parts: list[Part], noise: float, words: NDArray[np.int64]
    ) -> NDArray[np.int64]:
        """Every block with the channel of the part in which its words begin."""
        found = words.copy()
        begins = np.array([begin for begin, _, _ in parts])
        left = [received - self._known(channel) for _, _, channel in parts]
        for block in self._blocks():
            first = self.plan.payload[block.slots[0]]
            part = max(int(np.searchsorted(begins, first, "right")) - 1, 0)
            found[block.slots] = self._words(left[part], parts[part][2], block)
        return found

    def _words(self, left: Complex, channel: FirChannel, block: _Block) -> NDArray[np.int64]:
        return self.detect(left, channel, block.run, block.body, block.amplitude)

    def _known(self, channel: FirChannel) -> Complex:
        """What known symbols send: ahead of the first block there may be no guard against them."""
        return convolved(self.plan.known, channel.taps, channel.window)

    def _blocks(self) -> Iterator[_Block]:
        """Every block, in order."""
        plan, first = self.plan, 0
        for run in plan.blocks:
            for body in run.bodies.tolist():
                slots = np.arange(first, first + run.slots.size)
                yield _Block(run, body, slots, float(plan.amplitude[plan.payload[first]]))
                first += run.slots.size
