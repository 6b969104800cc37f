"""Breaks inside a frame: samples that a recorder lost without saying so, gain that steps.

Frames whose residuals show a change (`continuity_evidence`), or far more noise than their known
symbols, are looked at once more, from the known symbols outwards: the longest part in which nothing
changes is fitted, the break at its end is sought among alternatives (`break_search`), sized, mended
in the frame's own samples and erased where nothing is left to mend; and so on to the frame's ends.
What comes out replaces the frame when nothing changes in it any more. Frames without evidence are
left as they are, bit for bit.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
import scipy.stats
from numpy.typing import NDArray

from spatiq.receiver.acquisition import Acquisition
from spatiq.receiver.break_search import Break, find_break
from spatiq.receiver.continuity_evidence import Evidence, ends_early, evidence
from spatiq.receiver.frame_batch import FrameBatch
from spatiq.receiver.frame_model import FrameModel, model_of
from spatiq.receiver.front_end_figures import forget_frame
from spatiq.receiver.gain_corrections import mend_step, weigh_step
from spatiq.receiver.link_tables import LinkTables
from spatiq.receiver.partial_frames import (
    anchored,
    one_frame,
    part_of,
    restricted,
    return_frame,
    return_part,
)
from spatiq.receiver.refit import Refit
from spatiq.receiver.sample_losses import LossSearch, mend_loss

_CHANCE = 1e-6  # that noise alone passes for far more than the known symbols show
_MOST_BREAKS = 6
_FIRST = 48  # active periods beyond the known symbols with which the fitted part begins
_MARGIN = 256  # periods before the end of the fitted part in which a break may lie undetected
_BEYOND = 128  # periods behind a part that no longer fits that the search looks at
_HOLDS = 64  # periods by which the fitted part must grow between two breaks
_SHARP = 2.0  # periods within which silence sets in: no channel fades like that
_CLEAR = 3  # periods ahead of a break that are not held to be whole
# Radians. Two rounds of refit leave up to some 0.04 between pilots that 64 antennas send in turn
# and the payload.
_TURN = 0.08
_TOLD = 1.0  # dB by which noise must change to be told


@dataclass(frozen=True, eq=False)
class Continuity:
    """The stage, right after the refit.

    Attributes:
        acquisition, refit: the stages that are run again.
        between: stages for frames that are not torn. Frames of which everything could be put in its
            place are past doubt ahead of them, others after them.
        following: looks for motion. Frames that it explains are not torn, unless everything could
            be placed.
        sync_start: first period of the sync section.
    """

    acquisition: Acquisition
    refit: Refit
    between: Sequence[Callable[[FrameBatch], FrameBatch]]
    following: Callable[[FrameBatch], FrameBatch]
    sync_start: int

    def __call__(self, batch: FrameBatch) -> FrameBatch:
        """Mend frames that show evidence; fill breaks and erased."""
        if not batch.count:
            return batch
        suspects = self._suspects(batch)
        held = {i: m.one for i, m in self._mended(batch, suspects).items() if m.moved}
        told = batch.scores.copy()
        for stage in self.between:
            batch = stage(batch)
        # Those stages know nothing of breaks: what they made of a torn frame is not kept.
        _return_all(held, batch)
        if not np.array_equal(told, batch.scores):  # something was refitted
            suspects = self._suspects(batch)
        rest = self._mended(batch, suspects.difference(held, batch.matched))
        _return_all({i: m.one for i, m in rest.items() if m.placed}, batch)
        others = suspects.difference(rest, held)
        if others:
            seen = self._evidence(batch)
            for i in others:
                _tell_noise(batch, i, seen, i, self.refit.tables.active)
        batch = self.following(batch)
        if not rest:
            return batch
        followed = batch.noise <= self._limit(batch) * batch.header_noise
        torn = {i: m.one for i, m in rest.items() if not m.placed}
        moved = {i for i in torn if batch.moving and batch.moving[i] is not None and followed[i]}
        _return_all({i: one for i, one in torn.items() if i not in moved}, batch)
        return batch

    def _suspects(self, batch: FrameBatch) -> set[int]:
        """Frames with evidence of a break."""
        noisy = batch.noise > self._limit(batch) * batch.header_noise
        seen = self._evidence(batch)
        turned = seen.found[:, 1] & (np.abs(seen.size[:, 1]) > _TURN)
        found = turned | seen.found[:, [0, 2, 3]].any(axis=1)
        return set(map(int, np.flatnonzero(found | noisy | self._ending(batch))))

    def _mended(self, batch: FrameBatch, frames: set[int]) -> dict[int, _Mending]:
        """Those of the frames of which breaks make something whole."""
        tried = {i: _Mending(self, one_frame(batch, i)) for i in sorted(frames)}
        return {i: mending for i, mending in tried.items() if mending.run()}

    def _evidence(self, batch: FrameBatch) -> Evidence:
        bank = self.refit.bank
        return evidence(
            batch.scores, batch.channel.shape[1], bank.slope_energy, bank.samples_per_symbol
        )

    def _limit(self, batch: FrameBatch) -> float:
        freedom = batch.channel.shape[1] * self.refit.tables.active.size
        known = max(batch.header_freedom, 1)
        return float(scipy.stats.f.isf(_CHANCE, 2 * freedom, 2 * known))

    def _ending(self, batch: FrameBatch, tables: LinkTables | None = None) -> NDArray[np.bool_]:
        """Frames that end in silence although their last period is payload."""
        tables = tables or self.refit.tables
        if tables.active_word[-1] < 0 or tables.active[-1] != self.refit.tables.active[-1]:
            return np.zeros(batch.count, np.bool_)
        vectors = tables.codebook.vectors
        return ends_early(batch.symbols, batch.channel, batch.noise, vectors)

    def unbroken(self, part: FrameBatch, tables: LinkTables) -> bool:
        """Whether nothing changes in a part that was fitted."""
        noisy = part.noise[0] > self._limit(part) * part.header_noise[0]
        if noisy or self._evidence(part).found.any():
            return False
        return not self._ending(part, tables)[0]

    def changes_in_noise_only(self, part: FrameBatch) -> bool:
        """Whether nothing but the noise changes in a part that was fitted."""
        return not self._evidence(part).found[0, :3].any()


def _return_all(frames: dict[int, FrameBatch], batch: FrameBatch) -> None:
    """Enter mended frames in place of what became of them since."""
    for i, one in frames.items():
        return_frame(one, batch, i)
        batch.matched.pop(i, None)
        if batch.moving:
            batch.moving[i] = None
        if batch.front_end is not None:
            forget_frame(batch.front_end, i)


def _tell_noise(
    batch: FrameBatch, i: int, seen: Evidence, row: int, active: NDArray[np.int64]
) -> None:
    """Enter a change of the residuals' power that nothing mends."""
    change = 10.0 * np.log10(max(seen.size[row, 3], 1e-10))
    if not seen.found[row, 3] or abs(change) < _TOLD:
        return
    batch.breaks["noise_db"][i] = change
    first = min(int(seen.border[row, 3]) * 32, active.size - 1)
    batch.breaks["noise_at"][i] = active[first] - 0.5


class _Mending:
    """One frame on its way from its known symbols to its ends."""

    def __init__(self, stage: Continuity, one: FrameBatch) -> None:
        self.stage = stage
        self.one = one
        self.tables = stage.refit.tables
        self.moved = True  # all that lies behind breaks was moved to its place
        self.placed = True  # what lies behind each break could be put in its place
        self.low = self.high = 0  # active periods low..high-1 are known to belong together

    def run(self) -> bool:
        """Mend the frame; False when what is wrong with it is something else."""
        self._begin()
        mended = 0
        for _ in range(_MOST_BREAKS if self._fitted else 0):
            stuck = self._grow()
            span = self.high - self.low
            # What was mended must hold for a while: something else is at work otherwise.
            if stuck is None or span < mended + _HOLDS or not self._mend(*stuck):
                break
            mended = self.high - self.low
        return self._finish()

    def _begin(self) -> None:
        """Acquire anew, from known symbols that stand close together."""
        one, stage = self.one, self.stage
        tables = anchored(self.tables, stage.sync_start)
        one.t0[0], one.step[0] = one.search_t0[0], stage.refit.bank.samples_per_symbol
        one.phase[:] = 0.0
        replace(stage.acquisition, tables=tables)(one)
        own = np.flatnonzero(tables.in_header)
        self.low, self.high = int(own[0]), int(own[-1]) + 1
        self._anchor = tables
        self._fitted = False
        self._fit(self.low, self.high)

    def _grow(self) -> tuple[NDArray[np.int64], int] | None:
        """Widen the fitted part while nothing changes in it.

        Returns:
            Where the search for a break should look, in the order of travel, and which way; None
            when the whole frame is fitted.
        """
        size = self.tables.active.size
        while True:
            if self.high < size:
                fits, stop = self._widened(self.low, self.high, 1)
                if not fits:
                    return self._ahead(stop), 1
            elif self.low > 0:
                fits, stop = self._widened(self.low, self.high, -1)
                if not fits:
                    return self._ahead(stop)[::-1], -1
            else:
                return None

    def _ahead(self, stop: int) -> NDArray[np.int64]:
        """Active periods around the end of the fitted part, those behind it up to `stop`."""
        size = self.tables.active.size
        if stop >= self.high:
            first = max(self.high - _MARGIN, int(np.flatnonzero(self._anchor.in_header)[0]))
            return np.arange(first, min(stop + _BEYOND, size))
        last = min(self.low + _MARGIN, int(np.flatnonzero(self._anchor.in_header)[-1]) + 1)
        return np.arange(max(stop - _BEYOND, 0), last)

    def _widened(self, low: int, high: int, way: int) -> tuple[bool, int]:
        """Double the fitted part one way, or come as close to a break as `_MARGIN`."""
        size = self.tables.active.size
        reach = max(high - low, _FIRST)
        while True:
            stop = min(high + reach, size) if way > 0 else max(low - reach, 0)
            tried = (low, stop) if way > 0 else (stop, high)
            if self._fit(*tried):
                self.low, self.high = tried
                return True, stop
            if reach <= _MARGIN:
                return False, stop
            reach //= 2

    def _fit(self, low: int, high: int) -> bool:
        """Fit active periods low..high-1, and keep the fit when nothing changes in it."""
        kept = np.zeros(self.tables.active.size, np.bool_)
        kept[low:high] = True
        kept &= ~self.one.erased[0]
        if not kept.any():
            return False
        trial = one_frame(self.one, 0)
        tables = restricted(self._anchor, kept)
        part = part_of(trial, kept, tables)
        replace(self.stage.refit, tables=tables)(part)
        if not self.stage.unbroken(part, tables):
            return False
        trial.erased[0] = ~kept
        return_part(part, trial, 0, self.tables)
        trial.erased[0] = self.one.erased[0]
        model = model_of(trial, kept, self.tables, self.stage.refit.bank)
        line = model.line[0] + model.line[1] * self.tables.active
        trial.phase[0, ~kept] = line[~kept]
        self.one, self.model, self._fitted = trial, model, True
        return True

    def _mend(self, order: NDArray[np.int64], way: int) -> bool:
        """Find the break and mend it; False when there is none that could be."""
        order = order[~self.one.erased[0, order]]
        found = self._first_break(order, way)
        if found is None or found.kind == "noise":
            return False
        model = self.model
        if found.kind == "gain":
            self._mend_gain(model, order, found, way)
        elif not self._mend_shift(model, order, found, way):
            return False
        edge = int(order[max(found.at - 1, 0)])
        if way > 0:
            self.high = min(self.high, max(edge, self.low + 1))
        else:
            self.low = max(self.low, min(edge, self.high - 1))
        return True

    def _first_break(self, order: NDArray[np.int64], way: int) -> Break | None:
        """The first of several breaks: what lies ahead of the likeliest one must fit."""
        found = find_break(self.model, order)
        for _ in range(_MOST_BREAKS):
            if found is None or found.at <= _CLEAR:
                break
            edge = int(order[found.at - _CLEAR])
            if self.low <= edge < self.high:
                break
            if self._fit(*((self.low, edge + 1) if way > 0 else (edge, self.high))):
                self.low, self.high = min(self.low, edge), max(self.high, edge + 1)
                again = find_break(self.model, order)
                found = again if again is not None else found
                break
            earlier = find_break(self.model, order[: found.at - _CLEAR])
            if earlier is None:
                break
            found = earlier
        return found

    def _mend_gain(
        self, model: FrameModel, order: NDArray[np.int64], found: Break, way: int
    ) -> None:
        step = weigh_step(model, order, found, way)
        mend_step(self.one, step, way)
        breaks = self.one.breaks[0]
        decibel = way * 20.0 * float(np.log10(np.exp(np.mean(np.log(step.gain)))))
        before = 0.0 if np.isnan(breaks["gain_db"]) else float(breaks["gain_db"])
        if not np.isnan(breaks["gain_at"]) and abs(breaks["gain_at"] - step.place) < 4.0:
            decibel += before  # the same step, known better
        elif abs(decibel) < abs(before):
            return
        breaks["gain_db"], breaks["gain_at"] = decibel, step.place
        breaks["gain_std"] = 20.0 / np.log(10.0) * step.gain_std

    def _mend_shift(
        self, model: FrameModel, order: NDArray[np.int64], found: Break, way: int
    ) -> bool:
        one = self.one
        known = np.flatnonzero(self._anchor.in_header)
        settled = int(known[-1] if way > 0 else known[0])
        carrier = float(one.carrier[0])
        search = LossSearch(one, model, order, found, way, self.stage.refit, settled, carrier)
        loss = search.resolve()
        if loss is None:
            return False
        sharp = loss.std < _SHARP and search.silent_behind()
        self.placed &= loss.movable or sharp
        self.moved &= loss.movable
        mend_loss(one, model, loss, settled, way)
        breaks = one.breaks[0]
        if np.isnan(breaks["lost_at"]):
            breaks["lost_at"], breaks["lost_std"] = loss.place, loss.std
            breaks["phase_jump"] = loss.turn
        if loss.count < 0 or breaks["samples_lost"] < 0:
            breaks["samples_lost"] = -1
        else:
            breaks["samples_lost"] += loss.count
        return True

    def _finish(self) -> bool:
        """Fit the whole frame; was what was wrong with it mended?"""
        one = self.one
        kept = ~one.erased[0]
        if not self._fitted or not kept.any():
            return False
        tables = restricted(self.tables, kept)
        part = part_of(one, kept, tables)
        replace(self.stage.refit, tables=tables)(part)
        if not self.stage.changes_in_noise_only(part):
            return False
        seen = self.stage._evidence(part)
        self.moved &= not seen.found.any()  # past doubt only when nothing is left to explain
        breaks = one.breaks.copy()
        return_part(part, one, 0, self.tables)
        one.breaks[:] = breaks
        _tell_noise(one, 0, seen, 0, tables.active)
        mended = np.isfinite(breaks["gain_db"][0]) or np.isfinite(breaks["lost_at"][0])
        return bool(mended)
