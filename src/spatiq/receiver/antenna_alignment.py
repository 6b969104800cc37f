"""Reception of a frame whose antennas differ in delay, from its known symbols outwards.

Expectation-maximisation as in the refit, with the model of `delayed_antennas`: words are weighed
with their neighbours' interference taken away (`neighbour_decisions`); then carrier phase, channel,
noise, the antennas' delays and the clock follow from the expected symbols. The first look grows
from the known symbols, each time to twice their distance, so that phase and clock are followed.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from spatiq.receiver.delayed_antennas import (
    Complex,
    DelayKernels,
    Floats,
    convolved,
    delay_kernels,
    factor,
    read_antennas,
)
from spatiq.receiver.known_delays import KnownCorrelations, antenna_delays
from spatiq.receiver.link_tables import LinkTables
from spatiq.receiver.matched_filter import FilterBank
from spatiq.receiver.neighbour_decisions import (
    MOST,
    Expectation,
    NeighbourDecisions,
    Sent,
    nothing_known,
)
from spatiq.receiver.refit_kernels import refit_phase

_WIDE = (10.0, 1.0)  # prior variances of phase and carrier left: nothing is assumed
_FIRST = 32  # periods from the known symbols that the first look takes in
_ROUNDS = 3  # over the whole frame
_PASSES = 2  # of weighing the words, each with the last one's expectations
_LARGEST_MOVE = 0.1  # symbol periods, of a delay in one round


@dataclass
class DelayedFit:
    """State of a frame's fit; A antennas in use.

    Attributes:
        t0, step: instant of symbol 0 and samples per symbol.
        delays, delay_var: float64 (A,); symbol periods against t0.
        phase: float64 (Ka,); carrier phase at the active periods.
        channel: complex128 (Nr, A).
        noise: N0.
        energy: float64 (A,); behind each channel column.
        residual: complex128 (Nr, Nr); covariance of what is left, trace Nr N0.
        late, late_information: float64 (Nr,); score and information of each receive channel's
            delay, symbol periods.
        expected: what is known of the symbols.
        frequency_var, timing_var, step_var: variances of carrier, t0 and step.
    """

    t0: float
    step: float
    delays: Floats
    phase: Floats
    channel: Complex
    noise: float
    expected: Expectation
    delay_var: Floats
    energy: Floats
    residual: Complex
    late: Floats
    late_information: Floats
    frequency_var: float = 0.0
    timing_var: float = 0.0
    step_var: float = 0.0


class DelayedReception:
    """Fits frames of one link.

    Args:
        bank, tables: filter bank and link tables.
        clock_std, phase_walk: as in `Tracking`.
    """

    def __init__(
        self, bank: FilterBank, tables: LinkTables, clock_std: float, phase_walk: float
    ) -> None:
        self._bank, self._tables = bank, tables
        self._clock_std, self._walk = clock_std, phase_walk
        reach = int(np.ceil(bank.correlation.reach)) + 2
        self._correlations = KnownCorrelations(tables, reach)
        self.used = self._correlations.used
        self._first = int(tables.active[0])
        self._at = tables.active - self._first
        known = np.zeros((int(self._at[-1]) + 1, self.used.size), np.complex128)
        known[self._at] = tables.known_vectors[:, self.used]
        vectors = tables.codebook.vectors[:, self.used].astype(np.complex128)
        place = self._at[tables.payload]
        amplitude = tables.active_amplitude[tables.payload].astype(np.float64)
        self.sent = Sent(vectors, place, amplitude, known)
        header = tables.header - self._first
        after = np.searchsorted(header, place)
        before = np.where(after > 0, place - header[np.maximum(after - 1, 0)], known.shape[0])
        later = header[np.minimum(after, header.size - 1)] - place
        later = np.where(after < header.size, later, known.shape[0])
        self._distance = np.minimum(before, later)
        lags = np.arange(-reach, reach + 1.0)
        self._bend = bank.correlation.at(bank.correlation.bend, lags)

    def receive(self, planes: NDArray[np.float32], t0: float, step: float) -> DelayedFit:
        """Fit a frame anew, from its known symbols outwards."""
        bank, tables = self._bank, self._tables
        delays, channel = antenna_delays(planes, t0, step, self._correlations, tables, bank)
        channels, antennas = channel.shape
        fit = DelayedFit(
            t0=t0,
            step=step,
            delays=delays,
            phase=np.zeros(tables.active.size),
            channel=channel,
            noise=0.0,
            expected=nothing_known(self.sent),
            delay_var=np.zeros(antennas),
            energy=np.zeros(antennas),
            residual=np.zeros((channels, channels), np.complex128),
            late=np.zeros(channels),
            late_information=np.zeros(channels),
        )
        reach = 0
        for _ in range(2):
            self._round(planes, fit, self._distance <= reach)
        reach = _FIRST
        while reach < self._distance.max():
            self._round(planes, fit, self._distance <= reach)
            reach *= 2
        self.refit(planes, fit, _ROUNDS)
        return fit

    def refit(self, planes: NDArray[np.float32], fit: DelayedFit, rounds: int) -> None:
        """Further rounds over the whole frame."""
        for _ in range(rounds):
            self._round(planes, fit, self._distance >= 0, _PASSES)

    def _round(
        self,
        planes: NDArray[np.float32],
        fit: DelayedFit,
        looked: NDArray[np.bool_],
        passes: int = 1,
    ) -> None:
        """Weigh the words looked at, then fit all else to them."""
        kernels = delay_kernels(self._bank, fit.delays)
        y = self._read(planes, fit, self._bank.taps)
        decisions = self.decisions(fit, kernels, y)
        if looked.any():
            for _ in range(passes):
                fit.expected = decisions.weigh(fit.expected, looked)
        seen = np.ones(self._at.size, bool)
        seen[self._tables.payload] = looked
        turn = self._fit_phase(fit, decisions, seen)
        y *= np.exp(-1j * turn)[None, :, None]
        self._fit_channel(fit, kernels, y, seen)
        kernels = delay_kernels(self._bank, fit.delays)
        slope = self._read(planes, fit, self._bank.slopes) * fit.step
        self._fit_delays(fit, kernels, slope)

    def _read(
        self, planes: NDArray[np.float32], fit: DelayedFit, table: NDArray[np.float32]
    ) -> Complex:
        periods = self._tables.active
        return read_antennas(
            planes, fit.t0, fit.step, fit.delays, periods, fit.phase, self._bank, table
        )

    def decisions(
        self, fit: DelayedFit, kernels: DelayKernels, y: Complex, most: int = MOST
    ) -> NeighbourDecisions:
        """What weighs the words of a fit, given outputs (A, Ka, Nr)."""
        statistic = np.zeros(self.sent.known.shape, np.complex128)
        statistic[self._at] = np.einsum("akr,ra->ka", y, fit.channel.conj())
        gram = fit.channel.conj().T @ fit.channel
        return NeighbourDecisions(self.sent, kernels, gram, statistic, fit.noise, most)

    def _fit_phase(
        self, fit: DelayedFit, decisions: NeighbourDecisions, seen: NDArray[np.bool_]
    ) -> Floats:
        """Smooth the phase left over the periods seen, carried on beyond them; the change."""
        mean = fit.expected.mean
        root, project = factor(decisions.now)
        own = decisions.left(mean) + mean @ decisions.now.T
        active = self._tables.active[seen]
        at = self._at[seen]
        change = np.zeros(active.size, np.float32)
        level = max(fit.noise, 1e-12 * float(np.trace(decisions.now).real), 1e-30)
        fit.frequency_var = refit_phase(
            _parts(own[at] @ project.T),
            _parts(mean[at] @ root.T),
            active,
            level,
            np.array([*_WIDE, self._walk]),
            change,
        )
        phase = fit.phase[seen] + change
        before = fit.phase.copy()
        fit.phase = np.interp(self._tables.active, active, phase)
        for ends, side in ((slice(-64, None), 1), (slice(0, 64), -1)):
            edge = active[ends][-1 if side > 0 else 0]
            beyond = side * (self._tables.active - edge) > 0
            if beyond.any() and active[ends].size > 1:
                line = np.polyfit(active[ends], phase[ends], 1)
                fit.phase[beyond] = np.polyval(line, self._tables.active[beyond])
        return np.asarray(fit.phase - before, np.float64)

    def _fit_channel(
        self, fit: DelayedFit, kernels: DelayKernels, y: Complex, seen: NDArray[np.bool_]
    ) -> None:
        """Channel by least squares over the expected symbols, noise from what it leaves."""
        mean, doubt = fit.expected.mean, fit.expected.doubt
        sent = mean[self._at]
        antennas, channels = self.used.size, fit.channel.shape[0]
        cross = np.einsum("akr,ka->ra", y, sent.conj())
        gram = np.empty((antennas, antennas), np.complex128)
        made = np.zeros((self._at.size, antennas), np.complex128)
        home = np.argmax(np.abs(sent), axis=1)
        for a in range(antennas):
            around = convolved(mean, kernels.value[a])[self._at]
            gram[:, a] = sent[:, a].conj() @ around
            made[home == a] = around[home == a]
        gram += doubt * kernels.now.T
        fit.channel = cross @ np.linalg.pinv(gram, hermitian=True, rcond=1e-10)
        fit.energy = np.maximum(np.diag(gram).real, 0.0)
        error = (y[home, np.arange(home.size)] - made @ fit.channel.T)[seen]
        now = (fit.channel.conj().T @ fit.channel) * kernels.now
        unsure = max(float(np.sum(now * doubt.T).real), 0.0)
        freedom = max(channels * (int(seen.sum()) - antennas) - antennas - 2, 1)
        fit.noise = (float(np.sum(np.abs(error) ** 2)) + unsure) / freedom
        spread = fit.channel @ doubt @ fit.channel.conj().T
        covariance = error.T @ error.conj() + spread
        trace = float(np.trace(covariance).real)
        scale = channels * fit.noise / trace if trace > 0 else 0.0
        fit.residual = covariance * scale

    def _fit_delays(self, fit: DelayedFit, kernels: DelayKernels, slope: Complex) -> None:
        """Scoring step for the delays and the clock; what is left tells on receive channels."""
        mean = fit.expected.mean
        antennas = self.used.size
        score = np.zeros((antennas, self._at.size))
        information = np.zeros_like(score)
        fit.late[:] = 0.0
        power = np.abs(fit.channel) ** 2
        own = np.array([convolved(mean[:, [a]], self._bend[None])[:, 0] for a in range(antennas)])
        for a in range(antennas):
            left = slope[a] + convolved(mean, kernels.slope[a])[self._at] @ fit.channel.T
            sent = mean[self._at, a][:, None] * fit.channel[:, a]
            each = (sent.conj() * left).real
            fit.late += each.sum(axis=0)
            score[a] = each.sum(axis=1)
            information[a] = (mean[self._at, a].conj() * own[a][self._at]).real * power[:, a].sum()
        total = information.sum(axis=1)
        told = total > 0
        gain = 2.0 / max(fit.noise, 1e-30)
        fit.late_information = gain * (power / np.maximum(power.sum(axis=0), 1e-300)) @ total
        fit.late *= gain
        safe = np.where(told, total, 1.0)
        move = np.where(told, score.sum(axis=1) / safe, 0.0)
        period = self._tables.active.astype(np.float64)
        centre = np.where(told, information @ period / safe, 0.0)
        apart = period - centre[:, None]
        rate_score = float(np.sum((score - move[:, None] * information) * apart))
        rate_information = float(np.sum(information * apart**2))
        prior = 1.0 / self._clock_std**2 if self._clock_std > 0 else np.inf
        rate = gain * rate_score / (gain * max(rate_information, 0.0) + prior)
        fit.delay_var = np.where(told, 1.0 / (gain * safe), np.nan)
        fit.step_var = fit.step**2 / (gain * max(rate_information, 0.0) + prior)
        fit.timing_var = fit.step**2 / max(gain * float(total.sum()), 1e-30)
        fit.delays = fit.delays + np.clip(move, -_LARGEST_MOVE, _LARGEST_MOVE) - rate * centre
        fit.step *= 1.0 + rate
        common = float(np.mean(fit.delays[told])) if told.any() else 0.0
        fit.t0 += common * fit.step
        fit.delays = fit.delays - common

    def decided(self, planes: NDArray[np.float32], fit: DelayedFit) -> Decided:
        """The frame with every neighbour's interference as decided taken away."""
        sent = self.sent
        kernels = delay_kernels(self._bank, fit.delays)
        y = self._read(planes, fit, self._bank.taps)
        decisions = self.decisions(fit, kernels, y)
        hard = sent.known.copy()
        hard[sent.place] = sent.vectors[fit.expected.word] * sent.amplitude[:, None]
        root, project = factor(decisions.now)
        own = (decisions.left(hard) + hard @ decisions.now.T)[sent.place]
        amplitude = sent.amplitude[:, None]
        payload = self._tables.payload
        mine = hard[sent.place]
        home = np.argmax(np.abs(mine), axis=1)
        symbols = mine @ fit.channel.T
        for a in range(self.used.size):
            here = home == a
            made = convolved(hard, kernels.value[a])[sent.place[here]]
            symbols[here] += y[a][payload[here]] - made @ fit.channel.T
        return Decided(root, own @ project.T / amplitude, symbols / amplitude)


@dataclass(frozen=True, eq=False)
class Decided:
    """A frame's payload as flat channels would have it.

    Attributes:
        channel: complex128 (Nd, A); B.
        matched: complex128 (Kp, Nd); B x + white noise of variance N0, over the amplitude.
        symbols: complex128 (Kp, Nr); at the receive channels, each period at the instant of the
            antenna decided, over the amplitude.
    """

    channel: Complex
    matched: Complex
    symbols: Complex


def _parts(values: Complex) -> NDArray[np.float32]:
    """complex (n, N) -> float32 (n, 2, N), as kernels take them."""
    return np.ascontiguousarray(np.stack([values.real, values.imag], axis=1).astype(np.float32))
