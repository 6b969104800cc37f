"""Narrow-band interferers: lines in a frame's residual spectrum are estimated and taken out.

Lines that the survey found have left a little in the samples (see `cleaning.py`): on each chunk a
line whose amplitude and frequency are slightly off. To first order that is a line and the same line
times time; both are fitted on each chunk to the refit's residuals, the channel projected out, and
taken out of the samples. In frames whose residuals are correlated in time, further lines are looked
for where the residuals' periodogram stands out of its surroundings (D. C. Rife and R. R. Boorstyn,
IEEE Trans. Inf. Theory 20(5), 1974: the periodogram's maximum is maximum likelihood for one line).
What was sent is known but for the words in doubt: so, unlike a notch, this takes nothing out of the
signal but the share of unknowns in the number of periods.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.fft
import scipy.ndimage
import scipy.stats
from numpy.typing import NDArray

from spatiq.receiver.frame_batch import FrameBatch
from spatiq.receiver.front_end import FLOOR, FrontEnd, signal_power
from spatiq.receiver.front_end_figures import correlation_over_time, filter_gain
from spatiq.receiver.front_end_kernels import LAGS
from spatiq.receiver.front_end_survey import CHUNK, MOST_LINES
from spatiq.receiver.refit import Refit, Room, refit_room
from spatiq.recording.placement import Segment

_CHANCE = 1e-6  # per frame: that white noise has its spectrum looked at, and that a line is seen
_ROUNDS = 3
_AROUND = 32  # bins either side that tell a line's surroundings
_LEAST_GAIN = 0.05  # of the matched filter at its centre: lines beyond its band do no harm
_MOST_SHARE = 0.05  # of the periods: no more unknowns than that are spent on lines


@dataclass(frozen=True)
class Line:
    """A line in one frame: frequency in cycles per sample; the grid of chunks, or one for all."""

    frequency: float
    chunked: bool


@dataclass(frozen=True, eq=False)
class Interferer:
    """The stage after the front end's.

    Attributes:
        refit: run again on frames that lines were taken out of.
        front_end: as well.
        lines: of the survey, cycles per sample as received.
        search: whether further lines are looked for; not where the signal itself has some.
        segments: of the recording; chunks are counted from their starts.
        expected: float64 (LAGS,); correlation of white noise after the matched filter.
    """

    refit: Refit
    front_end: FrontEnd
    lines: tuple[float, ...]
    search: bool
    segments: tuple[Segment, ...]
    expected: NDArray[np.float64]

    def __call__(self, batch: FrameBatch) -> FrameBatch:
        """Take lines out; enter frequency and power of those found here."""
        sums = batch.front_end_sums
        if sums is None:
            return batch
        periods = self.refit.tables.active.size
        score = correlation_over_time(sums.lagged, periods, self.expected)[1]
        limit = scipy.stats.gamma.isf(_CHANCE / batch.channel.shape[1], LAGS)
        noisy = batch.noise > FLOOR * batch.step * signal_power(batch).mean(axis=1)
        suspicious = (score > limit) & noisy & self.search
        if self.lines:
            suspicious[:] = True
        room = None
        for i in np.flatnonzero(suspicious):
            room = room or refit_room(self.refit.tables, *batch.channel.shape[1:])
            self._clean(batch, int(i), room)
            self.front_end.again(batch, int(i))
        batch.front_end_sums = None  # later refits are not at the antennas any more
        return batch

    def _clean(self, batch: FrameBatch, i: int, room: Room) -> None:
        lines = [Line(f, True) for f in self.lines]
        taken: dict[float, NDArray[np.complex128]] = {}  # line and slope of each channel, (2, Nr)
        for turn in range(_ROUNDS):
            self.refit.refit_frame(batch, i, room)
            error = _residual(room, batch.channel[i])
            # What a known line has left passes for another one until it has been fitted once.
            searched = self.search and len(lines) < MOST_LINES and (turn > 0 or not self.lines)
            new = self._line_in(error, batch, i, lines) if searched else None
            if new is not None:
                lines.append(Line(new, False))
            if not lines:
                return
            for line, fitted in self._take_out(batch, i, lines, error, room[4]):
                if not line.chunked:
                    taken[line.frequency] = taken.get(line.frequency, 0.0) + fitted
        self.refit.refit_frame(batch, i, room)
        for k, line in enumerate(lines):
            if line.frequency in taken:
                # Mean over the window, time running from -1 to 1.
                power = np.abs(taken[line.frequency]) ** 2
                batch.line_frequency[i, k] = line.frequency
                batch.line_power[i, k] = power[0] + power[1] / 3

    def _line_in(
        self, error: NDArray[np.complex128], batch: FrameBatch, i: int, lines: list[Line]
    ) -> float | None:
        """Frequency as received of the strongest new line in the residuals (Ka, Nr)."""
        active = self.refit.tables.active
        length = int(active[-1] - active[0]) + 1
        size = scipy.fft.next_fast_len(2 * length)
        spread = np.zeros((size, error.shape[1]), np.complex128)
        spread[active - active[0]] = error * np.exp(1j * batch.phase[i].astype(np.float64))[:, None]
        power = np.sum(np.abs(scipy.fft.fft(spread, axis=0)) ** 2, axis=1)
        # The median of a sum of Nr exponentials, from that of the Gamma law.
        around = scipy.ndimage.median_filter(power, 2 * _AROUND + 1, mode="wrap")
        median = scipy.stats.gamma.median(error.shape[1])
        limit = scipy.stats.gamma.isf(_CHANCE / size, error.shape[1]) / median
        stands_out = power / np.maximum(around, 1e-300)
        # A line and its slope in time take up all that lies within a bin of them.
        cycles = scipy.fft.fftfreq(size)
        # So it is with the constant, which is the front end's to find.
        for line in [*lines, Line(0.0, False)]:
            away = cycles - (line.frequency - batch.carrier[i]) * batch.step[i]
            reach = 2 * batch.step[i] / CHUNK if line.chunked else 2.0 / length
            stands_out[np.abs((away + 0.5) % 1.0 - 0.5) <= reach] = 0.0
        if stands_out.max() < limit:
            return None
        top = int(np.argmax(np.where(stands_out >= limit, power, 0.0)))
        left, right = np.sqrt(power[top - 1]), np.sqrt(power[(top + 1) % size])
        bend = left + right - 2 * np.sqrt(power[top])
        top_at = top + (0.5 * (left - right) / bend if bend < 0 else 0.0)
        return float(((top_at / size + 0.5) % 1.0 - 0.5) / batch.step[i] + batch.carrier[i])

    def _take_out(
        self,
        batch: FrameBatch,
        i: int,
        lines: list[Line],
        error: NDArray[np.complex128],
        mean: NDArray[np.complex64],
    ) -> list[tuple[Line, NDArray[np.complex128]]]:
        """Fit lines to the residuals, subtract them; amplitude and slope (2, Nr) of each part."""
        active = self.refit.tables.active
        instants = batch.t0[i] + batch.step[i] * active
        turned = batch.carrier[i] * instants - batch.turns[i]
        away = np.exp(-2j * np.pi * turned - 1j * batch.phase[i].astype(np.float64))
        samples = np.arange(batch.planes.shape[3])
        parts = []
        for line in lines:
            gain = float(
                filter_gain(self.refit.bank, np.array([line.frequency - batch.carrier[i]]))[0]
            )
            if abs(gain) >= _LEAST_GAIN * float(filter_gain(self.refit.bank, np.zeros(1))[0]):
                parts += [(line, gain, *edges) for edges in self._chunks(batch, i, line.chunked)]
        columns = []
        for line, gain, begin, end in parts:
            inside = (instants >= begin) & (instants < end)
            wave = gain * away * np.exp(2j * np.pi * line.frequency * instants) * inside
            columns += [wave, wave * (2 * (instants - begin) / (end - begin) - 1)]
        if not columns or len(columns) > _MOST_SHARE * active.size:
            return []
        basis = np.stack(columns, axis=1)
        known, *_ = np.linalg.lstsq(mean, basis, rcond=1e-6)
        found, *_ = np.linalg.lstsq(basis - mean @ known, error, rcond=1e-4)
        fitted = np.asarray(found, np.complex128)  # (columns, Nr)
        back = np.exp(-2j * np.pi * (batch.carrier[i] * samples - batch.turns[i]))
        total = np.zeros((error.shape[1], samples.size), np.complex128)
        for k, (line, _, begin, end) in enumerate(parts):
            inside = (samples >= begin) & (samples < end)
            time = 2 * (samples - begin) / (end - begin) - 1
            wave = back * np.exp(2j * np.pi * line.frequency * samples) * inside
            total += (fitted[2 * k, :, None] + fitted[2 * k + 1, :, None] * time) * wave
        batch.planes[i, :, 0] -= total.real.astype(np.float32)
        batch.planes[i, :, 1] -= total.imag.astype(np.float32)
        return [(part[0], fitted[2 * k : 2 * k + 2]) for k, part in enumerate(parts)]

    def _chunks(self, batch: FrameBatch, i: int, chunked: bool) -> list[tuple[int, int]]:
        """Begin and end, within the window, of the chunks on which a frame lies."""
        width = batch.planes.shape[3]
        if not chunked:
            return [(0, width)]
        segment = self.segments[batch.segment[i]]
        first = int(batch.first_sample[i] - segment.start)
        low = batch.t0[i] + first
        high = low + batch.step[i] * float(self.refit.tables.active[-1])
        grid = range(int(low) // CHUNK * CHUNK, int(high) + 1, CHUNK)
        return [(g - first, g - first + CHUNK) for g in grid]


def _residual(room: Room, channel: NDArray[np.complex128]) -> NDArray[np.complex128]:
    """y - H E[x] of all active periods, (Ka, Nr)."""
    y = room[0][:, 0].astype(np.float64) + 1j * room[0][:, 1]
    return np.asarray(y - room[4] @ channel.T)
