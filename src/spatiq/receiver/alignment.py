"""Alignment: receive channels and transmit antennas whose signals arrive at different times.

Cables of different length delay receive channels; transmit chains that are not in step delay
antennas. Evidence: see `delay_evidence`. What shows none is left as it is, to the bit.

A receive channel's delay is taken out of its samples (`fractional_delay`): each channel is then
matched-filtered at its own instant, and every later stage sees channels that are in step. Delays
that the residuals show to be large are first sought by the known symbols, and the frame received
anew. An attempt that does not lower the noise is undone.

Antennas' delays cannot be taken out of samples in which all antennas are added up. Such frames are
received with the delays in the model (`antenna_alignment`), and words are decided on vectors from
which the neighbours' interference has been taken (`decision_runs`).
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from functools import cached_property
from typing import Any

import numpy as np
import scipy.stats
from numpy.typing import NDArray

from spatiq.receiver.antenna_alignment import DelayedFit, DelayedReception
from spatiq.receiver.delay_evidence import (
    CHANCE,
    DelayEvidence,
    channel_delays,
    delay_evidence,
    evidence_scale,
    relative,
)
from spatiq.receiver.fractional_delay import advanced
from spatiq.receiver.frame_batch import (
    ANTENNAS_ALIGNED,
    RECEIVE_ALIGNED,
    FrameBatch,
    MatchedFrame,
)
from spatiq.receiver.known_delays import KnownCorrelations, receive_delays
from spatiq.receiver.refit import Refit, mean_slope

_SMALL = 0.1  # symbol periods: beyond, residuals no longer tell a delay in proportion
_ROUNDS = 4
# Interference over N0 below which delays of channels, of antennas are told, not taken out.
_WORTH, _MUCH = 1e-3, 5e-3
_LOBES = 4.0  # times the energy of side lobes: they may add up


@dataclass(frozen=True, eq=False)
class Alignment:
    """The stage.

    Attributes:
        refit: run again on frames that were changed.
        reception: acquisition, tracking and refit, for frames to be received anew.
    """

    refit: Refit
    reception: Sequence[Callable[[FrameBatch], FrameBatch]]

    def __call__(self, batch: FrameBatch) -> FrameBatch:
        """Take out delays that show; fill the delays and what was taken out."""
        if not batch.count:
            return batch
        receive, antennas = self._evidence(batch, 1), self._evidence(batch, 2)
        step = batch.step[:, None]
        batch.receive_delay[:] = receive.delay * step
        batch.receive_delay_var[:] = receive.variance * step**2
        batch.antenna_delay[:] = antennas.delay
        batch.antenna_delay_var[:] = antennas.variance
        channels = receive.significant & (receive.loss > _WORTH) | self._elsewhere(batch)
        shown = antennas.significant & (antennas.loss > _MUCH) | self._apart(batch)
        for i in np.flatnonzero(channels | shown):
            self._align(batch, int(i), bool(channels[i]))
        return batch

    @cached_property
    def _delayed(self) -> DelayedReception:
        """Made when a frame needs it."""
        refit = self.refit
        return DelayedReception(refit.bank, refit.tables, refit.clock_std, refit.phase_walk)

    @cached_property
    def _side_lobes(self) -> NDArray[np.float64]:
        """Energy of antenna a's known symbols' correlation with b's a period on, (Nt, Nt)."""
        antennas = self.refit.tables.known_vectors.shape[1]
        correlations = KnownCorrelations(self.refit.tables, 1)
        lobes = np.zeros((antennas, antennas))
        beside = np.max(np.abs(correlations.lagged[::2]) ** 2, axis=0)
        lobes[np.ix_(correlations.used, correlations.used)] = beside
        return lobes

    def _align(self, batch: FrameBatch, i: int, channels: bool) -> None:
        """Try channels' delays, antennas' delays, both, as far as each leaves something to explain.

        Delays of antennas that fade differently on each channel look like channels', and the other
        way about; what is tried last starts from either.
        """
        frame = one_frame(batch, i)
        before = kept(frame)
        if channels:
            self._align_channels(frame)
        # Words that span several periods are beyond the model of neighbours.
        if self.refit.tables.codebook.block > 1 or not self._antennas_show(frame):
            return
        aligned = kept(frame)
        restore(frame, before)
        settled = self._align_antennas(batch, i)
        if settled and noise_level(frame) < noise_level_of(aligned["residual"][0]):
            return
        tried = kept(frame), batch.matched.pop(i, None)
        restore(frame, aligned)
        if not self._align_antennas(batch, i) or noise_level(frame) > noise_level_of(
            tried[0]["residual"][0]
        ):
            restore(frame, tried[0])
            batch.matched.pop(i, None)
            if tried[1] is not None:
                batch.matched[i] = tried[1]

    def _antennas_show(self, frame: FrameBatch) -> bool:
        found = self._evidence(frame, 2)
        shown = found.significant & (found.loss > _MUCH) | self._apart(frame)
        return bool(shown[0])

    def _apart(self, batch: FrameBatch) -> NDArray[np.bool_]:
        """Frames with an antenna that its known symbols place a whole period out of step."""
        energy = np.diag(self.refit.tables.header_gram).real[:, None]
        limit = 0.5 * scipy.stats.chi2.isf(CHANCE, 2) * energy
        noise = np.einsum("frr->fr", batch.residual).real[:, None, :]
        beside = np.max(batch.lag_energy[:, :, ::2], axis=2)
        # What the other antennas' known symbols leave there, were they as strong as they look.
        gain = batch.lag_energy.max(axis=2) / np.maximum(energy, 1e-300) ** 2
        lobes = _LOBES * np.einsum("ab,fbr->far", self._side_lobes, gain)
        seen = (beside > batch.lag_energy[:, :, 1]) & (beside > limit * noise + lobes)
        seen &= energy > 0
        return np.asarray(seen.any(axis=(1, 2)))

    def _align_antennas(self, batch: FrameBatch, i: int) -> bool:
        """Receive frame i with delayed antennas; False, and all as it was, if that does not help.

        Delays of receive channels that then show are taken out as well.
        """
        frame = one_frame(batch, i)
        before = kept(frame)
        planes = frame.planes[0]
        fit = self._delayed.receive(planes, float(frame.t0[0]), float(frame.step[0]))
        total = np.zeros(planes.shape[0])
        for _ in range(_ROUNDS):
            late, variance, significant = channel_delays(fit.late, fit.late_information)
            if not significant:
                break
            total += np.nan_to_num(late) * fit.step
            planes[:] = advanced(planes, np.nan_to_num(late) * fit.step)
            self._delayed.refit(planes, fit, 2)
        settled = not significant
        for _ in range(_ROUNDS if total.any() else 0):
            # Less than significant, but nearer than not at all.
            total += np.nan_to_num(late) * fit.step
            planes[:] = advanced(planes, np.nan_to_num(late) * fit.step)
            self._delayed.refit(planes, fit, 2)
            late, variance, _ = channel_delays(fit.late, fit.late_information)
        weight = 1.0 / fit.delay_var
        _, _, differ = channel_delays(fit.delays * weight, weight)
        if not differ or noise_level_of(fit.residual) >= noise_level(frame):
            restore(frame, before)
            return False
        told = np.where(frame.aligned[0] & RECEIVE_ALIGNED, before["receive_delay"][0], 0.0)
        frame.receive_delay[0], _ = relative(told + total + late * fit.step, variance)
        frame.receive_delay_var[0] = variance * fit.step**2
        if total.any():
            frame.aligned[0] |= RECEIVE_ALIGNED
        self._enter(batch, i, fit)
        return settled

    def _enter(self, batch: FrameBatch, i: int, fit: DelayedFit) -> None:
        """Fill in frame i from the fit of its delayed antennas."""
        used = self._delayed.used
        decided = self._delayed.decided(batch.planes[i], fit)
        batch.channel[i] = 0.0
        batch.channel[i][:, used] = fit.channel
        batch.antenna_energy[i] = 0.0
        batch.antenna_energy[i, used] = fit.energy
        batch.noise[i], batch.residual[i] = fit.noise, fit.residual
        batch.t0[i], batch.step[i] = fit.t0, fit.step
        batch.timing_var[i], batch.step_var[i] = fit.timing_var, fit.step_var
        batch.frequency_var[i], batch.phase[i] = fit.frequency_var, fit.phase
        rate = mean_slope(self.refit.tables.active, batch.phase[i])
        batch.carrier_estimate[i] = batch.carrier[i] + rate / (2 * np.pi * fit.step)
        batch.symbols[i] = decided.symbols
        told = np.isfinite(fit.delay_var) & (fit.delay_var < 0.01)
        delay, variance = relative(
            np.where(told, fit.delays, np.nan), np.where(told, fit.delay_var, np.nan)
        )
        batch.antenna_delay[i], batch.antenna_delay_var[i] = np.nan, np.nan
        batch.antenna_delay[i, used], batch.antenna_delay_var[i, used] = delay, variance
        batch.aligned[i] |= ANTENNAS_ALIGNED
        whole = np.zeros((len(decided.channel), batch.channel.shape[2]), np.complex128)
        whole[:, used] = decided.channel

        def again(changed: FrameBatch, at: int) -> None:
            self._go_on(changed, at, fit)

        batch.matched[i] = MatchedFrame(whole, decided.matched.astype(np.complex64), again)

    def _go_on(self, batch: FrameBatch, i: int, fit: DelayedFit) -> None:
        """Further rounds for a frame whose samples and channel were changed alike."""
        fit.channel = batch.channel[i][:, self._delayed.used]
        fit.noise = float(batch.noise[i])
        self._delayed.refit(batch.planes[i], fit, 2)
        self._enter(batch, i, fit)

    def _evidence(self, batch: FrameBatch, axis: int) -> DelayEvidence:
        channels = batch.channel.shape[1]
        scale = evidence_scale(self.refit.bank.correlation, self.refit.tables.active.size, channels)
        noise = np.einsum("frr->fr", batch.residual).real
        return delay_evidence(batch.delay_score, batch.delay_energy, noise, scale, axis)

    def _elsewhere(self, batch: FrameBatch) -> NDArray[np.bool_]:
        """Frames with a channel that shows little signal where it is looked for, but much else.

        Channels a whole symbol period apart: where one is in step, the other is orthogonal.
        """
        noise = np.einsum("frr->fr", batch.residual).real
        alive = noise > 1e-9 * noise.max(axis=1, keepdims=True)
        least = np.min(noise, axis=1, where=alive, initial=np.inf, keepdims=True)
        spread = np.sqrt(2.0 / self.refit.tables.active.size)
        energy = batch.delay_energy.sum(axis=2)
        ratio = np.divide(energy, noise, out=np.zeros_like(energy), where=alive)
        full = self.refit.tables.active.size * 2.0 * self.refit.bank.correlation.slope_at(1.0) ** 2
        weak = (ratio < 0.25 * ratio.max(axis=1, keepdims=True)) | (ratio < full)
        odd = alive & weak & (noise > (1.0 + 6.0 * spread) * least)
        return np.asarray(odd.any(axis=1))

    def _align_channels(self, frame: FrameBatch) -> None:
        """Take the receive channels' delays out of a batch of one frame, or leave it as it was."""
        before = kept(frame)
        found = self._evidence(frame, 1)
        total = np.zeros(frame.channel.shape[1])
        large = np.isnan(found.delay).any() or float(np.max(np.abs(found.delay))) > _SMALL
        if large or not found.significant[0]:
            total += self._receive_anew(frame)
        if not total.any() and not found.significant[0]:
            return
        for turn in range(_ROUNDS):
            found = self._evidence(frame, 1)
            delay = np.nan_to_num(found.delay[0]) * frame.step[0]
            if turn > 0 and not found.significant[0]:
                break
            total += delay
            frame.planes[0] = advanced(frame.planes[0], delay)
            self.refit.refit_frame(frame, 0)
        if noise_level(frame) >= noise_level_of(before["residual"][0]):
            restore(frame, before)
            return
        # What is left after the last move is part of the estimate.
        rest = self._evidence(frame, 1)
        told, _ = relative(total + rest.delay * frame.step, rest.variance)
        frame.receive_delay[:], frame.receive_delay_var[:] = told, rest.variance * frame.step**2
        frame.aligned[0] |= RECEIVE_ALIGNED
        antennas = self._evidence(frame, 2)
        frame.antenna_delay[:], frame.antenna_delay_var[:] = antennas.delay, antennas.variance

    def _receive_anew(self, frame: FrameBatch) -> NDArray[np.float64]:
        """Delays as the known symbols have them, taken out; the frame received again."""
        bank, tables = self.refit.bank, self.refit.tables
        step = float(frame.step[0])
        # Two samples or half a symbol period either way, and t0 may be at either end.
        reach = max(1.0, 4.0 / step) + 0.25
        late = receive_delays(frame.planes[0], frame.t0[0], step, reach, tables, bank) * step
        if np.isnan(late).all() or np.nanmax(late) - np.nanmin(late) < _SMALL * step:
            return np.zeros_like(late)
        mean = float(np.nanmean(late))
        late = np.where(np.isnan(late), mean, late)
        frame.planes[0] = advanced(frame.planes[0], late - mean)
        frame.t0[0] += mean
        frame.phase[0] = 0.0
        for stage in self.reception:
            frame = stage(frame)
        return late - mean


def one_frame(batch: FrameBatch, i: int) -> FrameBatch:
    """Frame i as a batch of its own that shares the arrays."""
    parts: dict[str, Any] = {
        name: value[i : i + 1] for name, value in vars(batch).items() if _by_frame(value)
    }
    return replace(batch, **parts, matched={})


def kept(frame: FrameBatch) -> dict[str, NDArray[Any]]:
    """Copies of all of a frame's arrays."""
    return {name: value.copy() for name, value in vars(frame).items() if _by_frame(value)}


def restore(frame: FrameBatch, before: dict[str, NDArray[Any]]) -> None:
    """Set a frame's arrays back to what they were."""
    for name, value in before.items():
        getattr(frame, name)[:] = value


def _by_frame(value: object) -> bool:
    return isinstance(value, np.ndarray)


def noise_level(frame: FrameBatch) -> float:
    """Likelihood's measure of a frame's noise: sum of the log N0 of its receive channels."""
    return noise_level_of(frame.residual[0])


def noise_level_of(residual: NDArray[np.complex128]) -> float:
    """The same of a residual covariance (Nr, Nr); channels without any noise left out."""
    noise = np.diagonal(residual).real
    return float(np.sum(np.log(noise[noise > 1e-9 * noise.max()])))
