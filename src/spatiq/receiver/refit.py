"""Refit: the second look at the frame. Carrier, timing, channel and noise from all its symbols.

Expectation-maximisation over the codewords sent (A. P. Dempster, N. M. Laird, D. B. Rubin, J. R.
Statist. Soc. B 39(1), 1977): expectations of x and x x^H under the posterior of the codewords take
the place of known symbols, so that wrong decisions do not pull the estimates and N0 is not taken
too small at low SNR.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from spatiq.kernels import C64, F32, F64
from spatiq.receiver.alignment_kernels import delay_scores, lag_energies
from spatiq.receiver.continuity_kernels import block_scores
from spatiq.receiver.frame_batch import SCORE_BLOCK, FrameBatch
from spatiq.receiver.front_end_figures import empty_sums
from spatiq.receiver.front_end_kernels import residual_sums
from spatiq.receiver.link_tables import LinkTables
from spatiq.receiver.matched_filter import FilterBank
from spatiq.receiver.motion_kernels import motion_sums
from spatiq.receiver.partial_frames import kept_part, return_part
from spatiq.receiver.refit_kernels import refit_round, residual_covariance, take_symbols

Room = tuple[F32, F32, F32, F32, C64, F64, F64]
_WIDE = (10.0, 1.0)  # prior variances of phase and carrier left: nothing is assumed


@dataclass(frozen=True, eq=False)
class Refit:
    """The stage; attributes as in `Tracking`, and `rounds` of refitting."""

    bank: FilterBank
    tables: LinkTables
    clock_std: float
    phase_walk: float
    rounds: int = 2

    def __call__(self, batch: FrameBatch) -> FrameBatch:
        """Refine t0, step, phase, channel, noise; fill symbols, residuals, scores, variances."""
        channels, antennas = batch.channel.shape[1:]
        room = refit_room(self.tables, channels, antennas)
        batch.front_end_sums = empty_sums(batch.count, channels, antennas)
        for i in range(batch.count):
            self.refit_frame(batch, i, room)
        return batch

    def refit_frame(self, batch: FrameBatch, i: int, room: Room | None = None) -> None:
        """Refit frame i of a batch alone; `room` spares making it anew.

        Erased periods are left out.
        """
        if i in batch.matched:
            batch.matched[i].refit(batch, i)
            return
        if batch.erased[i].any():
            part, kept = kept_part(batch, i, self.tables)
            replace(self, tables=kept).refit_frame(part, 0)
            return_part(part, batch, i, self.tables)
            return
        tables, bank = self.tables, self.bank
        room = room or refit_room(tables, *batch.channel.shape[1:])
        sent = (
            tables.active,
            tables.active_word,
            tables.active_amplitude,
            tables.known_vectors,
            tables.known_gram,
        )
        filters = (bank.taps, bank.slopes, bank.phases, bank.curvature)
        step_var = (self.clock_std * bank.samples_per_symbol) ** 2
        priors = np.array([*_WIDE, self.phase_walk, step_var])
        timing = np.array([batch.t0[i], batch.step[i], 0.0, 0.0])
        before = float(timing[0]), float(timing[1])
        for turn in range(self.rounds):
            batch.noise[i], batch.frequency_var[i] = refit_round(
                batch.planes[i],
                timing,
                batch.phase[i],
                batch.channel[i],
                batch.noise[i],
                sent,
                tables.words.parts,
                filters,
                priors,
                turn == 0,
                room,
                batch.antenna_energy[i],
            )
        batch.t0[i], batch.step[i], batch.timing_var[i], batch.step_var[i] = timing
        self.residuals(batch, i, before, room)
        take_symbols(room[0], tables.payload, tables.symbol_amplitude, batch.symbols[i])
        slope = mean_slope(tables.active, batch.phase[i])  # radians per symbol period
        batch.carrier_estimate[i] = batch.carrier[i] + slope / (2 * np.pi * batch.step[i])

    def residuals(self, batch: FrameBatch, i: int, before: tuple[float, float], room: Room) -> None:
        """What the residuals of frame i say of delays, noise, motion and breaks.

        `before`: t0 and step ahead of the refit.
        """
        tables = self.tables
        delay_scores(
            room[0],
            room[1],
            room[4],
            batch.channel[i],
            tables.active,
            self.bank.correlation.slope_at(1.0),
            batch.delay_score[i],
            batch.delay_energy[i],
        )
        lag_energies(
            room[0],
            tables.header_places,
            tables.active,
            tables.header_vectors.parts,
            batch.lag_energy[i],
        )
        in_doubt = residual_covariance(
            room[0],
            room[4],
            tables.active_word,
            tables.words.parts,
            room[5],
            batch.channel[i],
            batch.noise[i],
            batch.residual[i],
        )
        motion_sums(
            room[0],
            room[4],
            tables.active_word,
            batch.channel[i],
            batch.motion_scores[i],
            batch.motion_energy[i],
            batch.motion_reference[i],
        )
        block_scores(
            room[0],
            room[1],
            room[2],
            room[6],
            tables.active,
            tables.active_word,
            in_doubt,
            (batch.t0[i] - before[0], batch.step[i] - before[1]),
            SCORE_BLOCK,
            batch.scores[i],
        )
        self._sum_residuals(batch, i, room)

    def _sum_residuals(self, batch: FrameBatch, i: int, room: Room) -> None:
        """What the front end's figures of frame i are estimated from."""
        if batch.front_end_sums is not None:
            residual_sums(
                room[0],
                room[4],
                batch.channel[i],
                self.tables.active,
                batch.phase[i],
                (batch.t0[i], batch.step[i]),
                (batch.carrier[i], batch.turns[i]),
                batch.front_end_sums.of(i),
            )


def refit_room(tables: LinkTables, channels: int, antennas: int) -> Room:
    """Arrays that `refit_round` works in."""
    n = tables.active.size
    return (
        np.empty((n, 2, channels), np.float32),
        np.empty((n, 2, channels), np.float32),
        np.empty((n, 2, channels), np.float32),
        np.empty(n, np.float32),
        np.empty((n, antennas), np.complex64),
        np.empty(tables.codebook.vectors.shape[0]),
        np.empty(n),
    )


def mean_slope(k: NDArray[np.int64], phase: NDArray[np.float32]) -> float:
    """Least-squares slope of a phase track."""
    centred = k - k.mean()
    energy = float(np.sum(centred * centred))
    return float(np.sum(centred * phase.astype(np.float64))) / energy if energy > 0 else 0.0
