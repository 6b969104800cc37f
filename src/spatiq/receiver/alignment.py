"""Alignment: receive channels and transmit antennas whose signals arrive at different times.

Cables of different length delay receive channels; transmit chains that are not in step delay
antennas. Evidence: see `delay_evidence`. What shows none is left as it is, to the bit.

A receive channel's delay is taken out of its samples (`fractional_delay`): each channel is then
matched-filtered at its own instant, and every later stage sees channels that are in step. Delays
that the residuals show to be large are first sought by the known symbols, and the frame received
anew. An attempt that does not lower the noise is undone.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spatiq.receiver.delay_evidence import (
    DelayEvidence,
    delay_evidence,
    evidence_scale,
    relative,
)
from spatiq.receiver.fractional_delay import advanced
from spatiq.receiver.frame_batch import RECEIVE_ALIGNED, FrameBatch
from spatiq.receiver.known_delays import receive_delays
from spatiq.receiver.refit import Refit

_SMALL = 0.1  # symbol periods: beyond, residuals no longer tell a delay in proportion
_ROUNDS = 4
_WORTH = 1e-3  # interference over N0 below which a delay is told, not taken out


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
        shown = receive.significant & (receive.loss > _WORTH)
        for i in np.flatnonzero(shown | self._elsewhere(batch)):
            self._align_channels(one_frame(batch, int(i)))
        return batch

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
    return replace(batch, **parts)


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
