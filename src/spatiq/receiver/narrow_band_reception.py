"""Reception of frames under narrow-band noise: what all other periods tell of it is taken away.

Carrier and timing are acquired on samples with the band excised. Then, again and again: what the
fit leaves, over all periods of the frame and all receive channels, is interpolated
(`noise_interpolation.py`), so that of each period's noise only what no other period tells is left;
the difference is taken out of the samples as a signal of the link's own pulses, and the frame is
refitted, noise turned white over the channels. At first nothing but the frame's samples is known,
and signal counts as noise: that is a filter that excises the band, and where the noise comes from
one direction, only in that direction. Own symbols never take part in their own interference, so
that a wrong decision does not confirm itself.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from spatiq.receiver.acquisition import Acquisition
from spatiq.receiver.frame_batch import FrameBatch
from spatiq.receiver.front_end_figures import filter_gain
from spatiq.receiver.matched_filter import FilterBank, derotate, sample_periods
from spatiq.receiver.narrow_band_survey import NarrowBand
from spatiq.receiver.noise_interpolation import Regression, interpolated
from spatiq.receiver.refit import Refit, Room, refit_room
from spatiq.receiver.refit_kernels import take_symbols
from spatiq.receiver.tracking import Tracking
from spatiq.receiver.whitening import whitening_matrix

Complex = NDArray[np.complex128]
_ROUNDS = 12
_SETTLED = 1e-5  # of the power sent: decisions that change by less are left
_CHANNEL_TURNS = 3  # the channel's fit and the noise's, in turn, between refits
_GRID = 4096  # frequencies at which the noise's spectrum is read off


@dataclass(frozen=True, eq=False)
class NarrowBandReception:
    """The stage that takes the place of acquisition, tracking and refit."""

    band: NarrowBand
    acquisition: Acquisition
    tracking: Tracking
    refit: Refit

    def __call__(self, batch: FrameBatch) -> FrameBatch:
        """As the three stages; the samples are left with the noise taken out."""
        received = batch.planes.copy()
        for i in range(batch.count):
            self._excise(batch, i)
        self._acquire(batch, received)
        turned = []
        for i in range(batch.count):
            y = self._periods(batch, i, received[i])
            left, _ = interpolated(y)
            self._take_out(batch, i, received[i], y - left)
            turned.append(self._whiten_by_header(batch, i, left))
        self._acquire(batch, received)
        self.tracking(batch)
        self.refit(batch)
        room = refit_room(self.refit.tables, *batch.channel.shape[1:])
        for i in range(batch.count):
            self._receive(batch, i, received[i], turned[i], room)
        return batch

    def _excise(self, batch: FrameBatch, i: int) -> None:
        reach = self.band.reach
        samples = (batch.planes[i, :, 0] + 1j * batch.planes[i, :, 1]).astype(np.complex64)
        padded = np.pad(samples, ((0, 0), (reach, reach)))
        excised = self.band.excised(padded, float(batch.carrier[i]))
        batch.planes[i, :, 0], batch.planes[i, :, 1] = excised.real, excised.imag

    def _acquire(self, batch: FrameBatch, received: NDArray[np.float32]) -> None:
        """Acquire on the batch's samples; turn those received by the same carrier."""
        carrier, turns = batch.carrier.copy(), batch.turns.copy()
        self.acquisition(batch)
        for i in range(batch.count):
            more = float(batch.carrier[i] - carrier[i])
            if more:
                derotate(received[i], more, float(batch.turns[i] - turns[i]) / more)

    def _periods(self, batch: FrameBatch, i: int, received: NDArray[np.float32]) -> Complex:
        """Matched-filter outputs (K, Nr) of all periods from the first active one to the last."""
        bank, periods = self.refit.bank, self._all_periods()
        out = np.empty((periods.size, 2, received.shape[0]), np.float32)
        t0, step = float(batch.t0[i]), float(batch.step[i])
        sample_periods(received, t0, step, periods, bank.taps, bank.phases, out)
        return np.asarray(out[:, 0] + 1j * out[:, 1], np.complex128)

    def _all_periods(self) -> NDArray[np.int64]:
        active = self.refit.tables.active
        return np.arange(active[0], active[-1] + 1)

    def _take_out(
        self, batch: FrameBatch, i: int, received: NDArray[np.float32], values: Complex
    ) -> None:
        """The batch's samples: those received without a signal of such symbols (K, Nr)."""
        instants = batch.t0[i] + batch.step[i] * self._all_periods()
        wave = modulated(values, instants, self.refit.bank, received.shape[2])
        batch.planes[i] = received
        batch.planes[i, :, 0] -= wave.real.astype(np.float32)
        batch.planes[i, :, 1] -= wave.imag.astype(np.float32)

    def _turn(self, batch: FrameBatch, i: int, covariance: Complex) -> Complex:
        """Turn the samples to noise that is white over the channels; returns W (Nr, Nr)."""
        whitener, _ = whitening_matrix(covariance)
        turned = whitener @ (batch.planes[i, :, 0] + 1j * batch.planes[i, :, 1])
        batch.planes[i, :, 0], batch.planes[i, :, 1] = turned.real, turned.imag
        return whitener

    def _whiten_by_header(self, batch: FrameBatch, i: int, left: Complex) -> Complex:
        """White as far as the known symbols tell, of `left` (K, Nr); returns W."""
        tables = self.refit.tables
        inside = tables.active[tables.in_header == 1]
        y = left[inside - tables.active[0]]
        x = tables.known_vectors[tables.in_header == 1].astype(np.complex128)
        channel, *_ = np.linalg.lstsq(x, y, rcond=1e-6)
        error = y - x @ channel
        covariance = error.T @ error.conj() / y.shape[0]
        return self._turn(batch, i, covariance + _little(covariance))

    def _receive(
        self,
        batch: FrameBatch,
        i: int,
        received: NDArray[np.float32],
        whitener: Complex,
        room: Room,
    ) -> None:
        """Interpolate and refit in turn; leave the frame in the coordinates of the antennas."""
        self.refit.refit_frame(batch, i, room)
        before = np.zeros(1, np.complex128)
        for _ in range(_ROUNDS):
            y, phase = self._level(batch, i, received)
            mean = self._sent(room)
            changed = np.sum(np.abs(mean - before) ** 2)
            before = mean
            channel: Complex = np.asarray(
                np.linalg.solve(whitener, batch.channel[i]), np.complex128
            )
            left, channel, noise, regression = _separate(y, mean, channel)
            # The samples hold the phase that was taken from y.
            taken = y - mean @ channel.T - left
            self._take_out(batch, i, received, taken * phase[:, None])
            covariance = left.T @ left.conj() / left.shape[0]
            whitener = self._turn(batch, i, covariance + _little(covariance))
            batch.channel[i] = whitener @ channel
            batch.noise[i] = float(np.mean(np.abs(left @ whitener.T) ** 2))
            timing = float(batch.t0[i]), float(batch.step[i])
            self.refit.refit_frame(batch, i, room)
            if changed <= _SETTLED * np.sum(np.abs(mean) ** 2):
                break
        self._turn_back(batch, i, whitener, timing, room)
        self._tell(batch, i, noise, regression)

    def _level(
        self, batch: FrameBatch, i: int, received: NDArray[np.float32]
    ) -> tuple[Complex, Complex]:
        """Periods (K, Nr) without the phase as followed, and its phasors (K,)."""
        active = self.refit.tables.active
        phase = np.interp(self._all_periods(), active, batch.phase[i].astype(np.float64))
        phasors = np.exp(1j * phase)
        return self._periods(batch, i, received) * phasors.conj()[:, None], phasors

    def _sent(self, room: Room) -> Complex:
        """E[x] (K, Nt) of all periods, 0 where nothing is sent."""
        active = self.refit.tables.active
        mean = np.zeros((int(active[-1] - active[0]) + 1, room[4].shape[1]), np.complex128)
        mean[active - active[0]] = room[4]
        return mean

    def _turn_back(
        self, batch: FrameBatch, i: int, whitener: Complex, before: tuple[float, float], room: Room
    ) -> None:
        """As at the antennas; `before`: t0 and step ahead of the last refit."""
        back = np.linalg.inv(whitener)
        planes = back @ (batch.planes[i, :, 0] + 1j * batch.planes[i, :, 1])
        batch.planes[i, :, 0], batch.planes[i, :, 1] = planes.real, planes.imag
        batch.channel[i] = back @ batch.channel[i]
        spread = back @ batch.residual[i] @ back.conj().T
        batch.noise[i] = float(np.trace(spread).real) / spread.shape[0]
        for part in room[:2]:
            values = (part[:, 0] + 1j * part[:, 1]) @ back.T
            part[:, 0], part[:, 1] = values.real, values.imag
        self.refit.residuals(batch, i, before, room)
        batch.residual[i] = spread
        tables = self.refit.tables
        take_symbols(room[0], tables.payload, tables.symbol_amplitude, batch.symbols[i])

    def _tell(self, batch: FrameBatch, i: int, noise: Complex, regression: Regression) -> None:
        """Frequency and power of the interferer: what the noise has beyond its least spectrum."""
        spectrum = np.einsum("frr->fr", regression.spectrum(np.arange(_GRID) / _GRID)).real
        away = np.array([self.band.frequency - batch.carrier[i]])
        gain = float(filter_gain(self.refit.bank, away)[0])
        power = np.mean(np.abs(noise) ** 2, axis=0) - spectrum.min(axis=0)
        batch.line_frequency[i, 0] = self.band.frequency
        batch.line_power[i, 0] = np.maximum(power, 0.0) / gain**2


def _separate(
    y: Complex, mean: Complex, channel: Complex
) -> tuple[Complex, Complex, Complex, Regression]:
    """Fit channel and noise in turn: generalised least squares once they agree.

    Returns what is left of the noise (K, Nr), channel, the noise and its regression.
    """
    gram = mean.T @ mean.conj()
    gram = gram + 1e-9 * np.trace(gram).real * np.eye(gram.shape[0])
    for _ in range(_CHANNEL_TURNS):
        left, _ = interpolated(y - mean @ channel.T)
        channel = channel + np.linalg.solve(gram.T, (left.T @ mean.conj()).T).T
    noise = y - mean @ channel.T
    left, regression = interpolated(noise)
    return left, channel, noise, regression


def _little(covariance: Complex) -> Complex:
    """A billionth on the diagonal: channels without any noise stay invertible."""
    size = covariance.shape[0]
    level = 1e-9 * float(np.trace(covariance).real) / size
    return np.asarray(level * np.eye(size), np.complex128)


def modulated(
    values: Complex, instants: NDArray[np.float64], bank: FilterBank, count: int
) -> Complex:
    """Signal (Nr, count) of pulses with values (K, Nr) at instants (K,), in samples, ascending.

    The adjoint of the matched filter: it gives the values back where the pulse is a Nyquist pulse.
    """
    whole = np.floor(instants).astype(np.int64)
    rows = bank.taps[np.round((instants - whole) * bank.phases).astype(np.int64)]
    length = rows.shape[1]
    wave = np.zeros((values.shape[1], count + 2 * length), np.complex128)
    begin = whole - length // 2 + 1 + length
    inside = (begin >= 0) & (begin + length <= wave.shape[1])
    for m in range(length):
        # Instants lie more than a sample apart: no place comes twice.
        wave[:, begin[inside] + m] += (values[inside] * rows[inside, m, None]).T
    return np.asarray(wave[:, length : length + count], np.complex128)
