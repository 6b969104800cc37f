"""How many samples are missing behind a break, and where exactly?

What follows the break is fitted by itself, as payload of unknown place. Its timing over what was
expected, L = n symbol periods and a rest, leaves a loss for each n; a loss is whole, and turns the
carrier by as much as the carrier's offset says. Which n is it? The one under which known symbols
are where they should be, and the frame ends where signal gives way to silence or to something else.
The posterior over n decides, every loss equally likely beforehand.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from spatiq.receiver.break_search import COARSE_LEFT, Break
from spatiq.receiver.frame_batch import FrameBatch
from spatiq.receiver.frame_model import Complex, Floats, FrameModel, model_of
from spatiq.receiver.partial_frames import part_of
from spatiq.receiver.refit import Refit

SURE = 0.98  # posterior probability at which a loss counts as resolved
_CLEAR = 3  # symbol periods at the break that are left out of the fit
_BEYOND = 48  # periods behind the break as found in which it may be
_FEWEST = 12  # periods behind the break below which nothing can be said
_TRUSTED = 48  # periods behind the break that are not taken for payload by chance
_MOST = 1024  # used for the fit
# Standard deviations of a whole part's estimate that a change amid it may reach unseen: half of the
# part tells each side, and the test's limit is 6.1 of the difference's. A line through the phase
# takes up three quarters of a jump, and the clock its own share of one in timing.
_UNSEEN = 12.5
_TIMING_FLOOR = 0.02  # samples: table steps and the pulse's own errors
_PHASE_FLOOR = 0.05  # radians


@dataclass(frozen=True)
class Loss:
    """Samples lost.

    Attributes:
        count: how many; -1 when it could not be told.
        cut: sample of the window from which on (onwards) or up to which (backwards) samples belong
            to the other side.
        place: of the break, symbol periods; `std`: its standard deviation.
        turn: jump of the recorded carrier's phase there, radians.
        movable: whether what lies behind the break can be put where it belongs.
    """

    count: int
    cut: int
    place: float
    std: float
    turn: float
    movable: bool


def symmetry(vectors: Complex) -> int:
    """Largest s of 1, 2, 4, 8, 16, 32, 64 for which turning by 2 pi / s permutes the codewords."""
    for s in (64, 32, 16, 8, 4, 2):
        turned = vectors * np.exp(2j * np.pi / s)
        nearest = np.min(np.sum(np.abs(turned[:, None] - vectors) ** 2, axis=2), axis=1)
        if np.all(nearest < 1e-9 * np.mean(np.sum(np.abs(vectors) ** 2, axis=1))):
            return s
    return 1


@dataclass(frozen=True, eq=False)
class LossSearch:
    """What stays the same while a break is looked at.

    Attributes:
        one: batch of one frame; `model`: of what comes before the break.
        order: active periods (indices) in the order of travel, `found` the break among them.
        way: 1 travelling onwards, -1 backwards.
        refit: the stage.
        settled: last active period (index) in the order of travel that is known for sure.
        carrier: removed from the samples so far, cycles per sample.
    """

    one: FrameBatch
    model: FrameModel
    order: NDArray[np.int64]
    found: Break
    way: int
    refit: Refit
    settled: int
    carrier: float

    def resolve(self) -> Loss | None:
        """The loss; None when what follows is neither payload nor silence."""
        tables = self.model.tables
        first = int(tables.active[self.order[self.found.at]])
        grid = self._grid(first)
        after = self._fitted(grid) if grid.size >= _FEWEST else None
        place, std = self._place(after)
        where = self.model.t0 + place * self.model.step
        unknown = Loss(
            -1, round(where - self.way * self._early(after) / 2), place, std, np.nan, False
        )
        if after is None:
            if not self.silent_behind():
                return None
            return self._anywhere(-1, np.nan) if self._may_be_shifted(place, std) else unknown
        grid = self._grid(first, _CLEAR)
        counts, chances, turns, offs = self._weighed(after, grid)
        best = int(np.argmax(chances))
        turn = float(np.angle(np.exp(1j * turns[best])))
        sure = chances[best] >= SURE and counts[best] >= 1
        count = int(counts[best]) if sure else -1
        if self._unseen(float(offs[best]), int(counts[best])):
            return self._anywhere(count, turn)
        return replace(unknown, count=count, turn=turn, movable=bool(sure))

    def silent_behind(self) -> bool:
        """Whether silence follows the break."""
        first = self.found.at + 2  # the pulse reaches over the break
        behind = self.order[first : first + _CLEAR + 1]
        if not behind.size:
            behind = self.order[self.found.at :]
        y = self.model.outputs(self.model.tables.active[behind])
        return bool(self.model.silent(y).sum() > self.model.unknown(y).sum())

    def _unseen(self, off: float, count: int) -> bool:
        """Whether a loss leaves so little trace that it may lie far ahead of where it showed."""
        phase_var, timing_var = self.model.spread_at(self.model.middle)
        early = count - np.rint(count / self.model.step) * self.model.step
        active = self.model.tables.active
        span = abs(float(active[self.order[self.found.at]] - active[self.settled]))
        drift = self.refit.clock_std * self.model.bank.samples_per_symbol * span
        return bool(
            abs(off) < 4.0 * _UNSEEN * np.sqrt(phase_var) + _PHASE_FLOOR
            and abs(early) < _UNSEEN * np.sqrt(timing_var) + drift + _TIMING_FLOOR
        )

    def _anywhere(self, count: int, turn: float) -> Loss:
        """Samples are missing between the last known symbol and the break as found."""
        active = self.model.tables.active
        nearest, end = float(active[self.settled]), float(active[self.order[self.found.at]])
        cut = round(self.model.t0 + (nearest + 2.5 * self.way) * self.model.step)
        return Loss(
            count, cut, (nearest + end) / 2, abs(end - nearest) / np.sqrt(12.0), turn, False
        )

    def _may_be_shifted(self, place: float, std: float) -> bool:
        """Whether silence up to the frame's end may be due to whole symbol periods lost earlier.

        They leave timing as it is, and turn the carrier by a symmetry of the codebook.
        """
        model = self.model
        last = float(model.tables.active[-1 if self.way > 0 else 0])
        silent, spread = abs(last - place), 1.0 + 2.0 * std
        unit = 2.0 * np.pi / symmetry(model.tables.codebook.vectors)
        for n in range(max(round(silent - spread), 1), round(silent + spread) + 1):
            count = round(n * model.step)
            off = 2.0 * np.pi * self.carrier * count
            if self._unseen(float(off - np.rint(off / unit) * unit), count):
                return True
        return False

    def _early(self, after: FrameModel | None) -> float:
        if after is None:
            return self.found.late * self.model.step
        return self.model.t0 - after.t0

    def _grid(self, first: int, clear: int = _CLEAR) -> NDArray[np.int64]:
        """Symbol periods behind the break whose filter lies inside the window, along the way."""
        half, width = self.model.bank.half, self.model.planes.shape[2]
        late = -self.found.late * self.model.step
        low = int(np.ceil((half - self.model.t0 - late) / self.model.step))
        high = int(np.floor((width - half - 1 - self.model.t0 - late) / self.model.step))
        if self.way > 0:
            return np.arange(first + clear, high + 1, dtype=np.int64)
        return np.arange(first - clear, low - 1, -1, dtype=np.int64)

    def _fitted(self, grid: NDArray[np.int64]) -> FrameModel | None:
        """What follows the break fitted by itself, as far as it looks like payload."""
        model = replace(self.model, noise=self.model.noise + COARSE_LEFT * self.model.signal)
        y = model.outputs(grid, -self.found.late * model.step) * np.exp(-1j * self.found.turn)
        other = np.maximum(model.silent(y), model.unknown(y))
        ahead = np.cumsum(model.mixture(y, self._amplitude()) - other)

        def other_than_silence(at: int) -> bool:
            beyond = y[at : at + _CLEAR + 1]
            return bool(model.silent(beyond).sum() < model.unknown(beyond).sum())

        end = int(np.argmax(ahead)) + 1
        if ahead[end - 1] <= 0 or end < _FEWEST:
            return None
        # A stretch that short may be chance, unless the frame ends there: in silence.
        if end < _TRUSTED and grid.size - end > _TRUSTED and other_than_silence(end):
            return None
        periods = np.sort(grid[: min(end, _MOST)])
        count = periods.size
        tables = replace(
            model.tables,
            active=periods,
            active_word=np.arange(count, dtype=np.int64),
            payload=np.arange(count, dtype=np.int64),
            active_amplitude=np.full(count, self._amplitude(), np.float32),
            symbol_amplitude=np.full(count, self._amplitude(), np.float32),
            known_vectors=np.zeros((count, self.one.channel.shape[2]), np.complex64),
            known_gram=np.zeros_like(model.tables.known_gram),
            in_header=np.zeros(count, np.uint8),
            header_places=np.zeros(0, np.int64),
        )
        own = replace(
            self.one,
            t0=np.array([model.t0 - self.found.late * model.step]),
            step=np.array([model.step]),
            noise=np.array([model.noise]),
            channel=self.one.channel.copy(),
            antenna_energy=self.one.antenna_energy.copy(),
            phase=(model.line[0] + model.line[1] * periods + self.found.turn)[None].astype(
                np.float32
            ),
            erased=np.zeros((1, count), np.bool_),
            residual=self.one.residual.copy(),
        )
        everything = np.ones(count, np.bool_)
        part = part_of(own, everything, tables)
        replace(self.refit, tables=tables)(part)
        return self._turned(model_of(part, everything, tables, model.bank))

    def _turned(self, after: FrameModel) -> FrameModel:
        """The same with the channel before the break, so that all phase is in the phase line."""
        angle = float(np.angle(np.sum(after.points * self.model.points.conj())))
        line = (after.line[0] + angle, after.line[1])
        return replace(
            after, line=line, points=self.model.points, known=self.model.known,
            tables=self.model.tables, noise=self.model.noise,
        )  # fmt: skip

    def _amplitude(self) -> float:
        amplitude = self.model.tables.active_amplitude[self.model.tables.payload]
        return float(np.sqrt(np.mean(amplitude.astype(np.float64) ** 2)))

    def _place(self, after: FrameModel | None) -> tuple[float, float]:
        """Where the break is, symbol periods, and its standard deviation."""
        tables, at = self.model.tables, self.found.at
        # A loss of whole symbol periods may go unseen for long: all that is payload is weighed.
        ahead = np.arange(self.settled + self.way, self.order[0], self.way)
        order = np.concatenate([ahead, self.order[: at + _BEYOND]])
        periods = tables.active[order]
        going_on = self.model.as_sent(order, self.model.outputs(periods))
        if after is None:
            y = self.model.outputs(periods, -self.found.late * self.model.step)
            y = y * np.exp(-1j * self.found.turn)
        else:
            y = after.outputs(periods)
        payload = tables.active_word[order] >= 0
        changed = np.where(payload, self.model.mixture(y, self._amplitude()), self.model.unknown(y))
        if self.found.kind == "silence":
            changed = self.model.silent(y)
        worth = np.cumsum((changed - going_on)[::-1])[::-1]
        chance = np.exp(worth - worth.max())
        chance /= chance.sum()
        place = periods - 0.5 * self.way
        mean = float(chance @ place)
        return mean, float(np.sqrt(chance @ (place - mean) ** 2 + 1.0 / 12.0))

    def _weighed(
        self, after: FrameModel, grid: NDArray[np.int64]
    ) -> tuple[NDArray[np.int64], Floats, Floats, Floats]:
        """Losses that are possible, their posterior probabilities, the carrier's jump, and
        what of it a symmetry of the codebook does not explain."""
        model, way = self.model, self.way
        tables = model.tables
        last = int(tables.active[-1] if way > 0 else tables.active[0])
        n = np.arange(0, abs(last - int(grid[0])) + 1)
        seen = after.middle
        true = seen + way * n
        real = way * (model.t0 + true * model.step - after.t0 - seen * after.step)
        counts = np.rint(real).astype(np.int64)
        spread = np.array([model.spread_at(float(t)) for t in true])
        own = after.spread_at(seen)
        timing = -0.5 * (counts - real) ** 2 / (spread[:, 1] + own[1] + _TIMING_FLOOR**2)
        order = symmetry(tables.codebook.vectors)
        turns = way * 2.0 * np.pi * self.carrier * counts
        off = after.phase_at(seen) - (model.line[0] + model.line[1] * true) - turns
        unit = 2.0 * np.pi / order
        branch = np.rint(off / unit) * unit
        phase = -0.5 * (off - branch) ** 2 / (spread[:, 0] + own[0] + _PHASE_FLOOR**2)
        weight = timing + phase + self._ends(after, grid, n, last)
        weight += self._known(after, grid, n, branch)
        chances = np.exp(weight - weight.max())
        jumps = turns + model.line[1] * counts / model.step * way + (off - branch)
        return counts, chances / chances.sum(), jumps, jumps - np.rint(jumps / unit) * unit

    def _ends(
        self, after: FrameModel, grid: NDArray[np.int64], n: NDArray[np.int64], last: int
    ) -> Floats:
        """Log-likelihood of payload up to the frame's end, and something else behind it."""
        y = after.outputs(grid)
        inside = np.concatenate([[0.0], np.cumsum(after.mixture(y, self._amplitude()))])
        rest = [
            np.concatenate([np.cumsum(law[::-1])[::-1], [0.0]])
            for law in (after.silent(y), after.unknown(y))
        ]
        count = np.clip(np.abs(last - self.way * n - int(grid[0])) + 1, 0, grid.size)
        beyond = self.way * (last - self.way * n - int(grid[0])) < 0
        count = np.where(beyond, 0, count)
        return np.asarray(inside[count] + np.logaddexp(rest[0][count], rest[1][count]))

    def _known(
        self, after: FrameModel, grid: NDArray[np.int64], n: NDArray[np.int64], branch: Floats
    ) -> Floats:
        """What known symbols behind the break add, over being any payload."""
        tables = self.model.tables
        known = np.flatnonzero(tables.active_word < 0)
        places = tables.active[known]
        gain = np.zeros(n.size)
        low, high = int(grid.min()), int(grid.max())
        at = places[None] - self.way * n[:, None]
        ahead = self.way * (at - int(grid[0])) >= 0
        usable = (at >= low) & (at <= high) & ahead
        if not usable.any():
            return gain
        y = after.outputs(grid)
        row = np.empty(high - low + 1, np.int64)
        row[grid - low] = np.arange(grid.size)
        payload = after.mixture(y, self._amplitude())
        for m in np.flatnonzero(usable.any(axis=1)):
            rows = row[at[m, usable[m]] - low]
            turned = y[rows] * np.exp(-1j * branch[m])
            sent = after.sent(turned, self.model.known[known[usable[m]]])
            gain[m] = float(np.sum(sent - payload[rows]))
        return gain


def mend_loss(one: FrameBatch, model: FrameModel, loss: Loss, settled: int, way: int) -> None:
    """Open a gap of zeros where samples were lost, and erase the periods in it.

    What lies behind the break moves to where it belongs, and its carrier is turned accordingly.
    Where that is unknown, all that lies behind the break is erased; `settled` is the last active
    period (index) that does not.
    """
    margin = (2.0 + 2.0 * loss.std) * model.step
    times = model.t0 + model.tables.active * model.step
    if not loss.movable:
        behind = times > loss.cut - margin if way > 0 else times < loss.cut + margin
        index = np.arange(times.size)
        one.erased[0] |= behind & ((index > settled) if way > 0 else (index < settled))
        return
    count, cut = loss.count, loss.cut
    planes = one.planes[0]
    width = planes.shape[2]
    cut = min(max(cut, 0), width)
    moved = planes[:, 0] + 1j * planes[:, 1]
    moved *= np.exp(-2j * np.pi * way * float(one.carrier[0]) * count)
    count = min(count, width)
    fresh = np.zeros_like(moved)
    if way > 0:
        fresh[:, :cut] = planes[:, 0, :cut] + 1j * planes[:, 1, :cut]
        fresh[:, min(cut + count, width) :] = moved[:, cut : max(width - count, cut)]
        lost = (times > cut - margin) & (times < cut + loss.count + margin)
    else:
        fresh[:, cut:] = planes[:, 0, cut:] + 1j * planes[:, 1, cut:]
        fresh[:, : max(cut - count, 0)] = moved[:, min(count, cut) : cut]
        lost = (times > cut - loss.count - margin) & (times < cut + margin)
        one.first_sample[0] += loss.count
    planes[:, 0], planes[:, 1] = fresh.real, fresh.imag
    one.erased[0] |= lost
