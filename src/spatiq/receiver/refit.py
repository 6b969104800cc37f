"""Refit: the second look at the frame. Carrier, timing, channel and noise from all its symbols.

Expectation-maximisation over the codewords sent (A. P. Dempster, N. M. Laird, D. B. Rubin, J. R.
Statist. Soc. B 39(1), 1977): expectations of x and x x^H under the posterior of the codewords take
the place of known symbols, so that wrong decisions do not pull the estimates and N0 is not taken
too small at low SNR.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from spatiq.receiver.frame_batch import FrameBatch
from spatiq.receiver.link_tables import LinkTables
from spatiq.receiver.matched_filter import FilterBank, sample_periods
from spatiq.receiver.refit_kernels import (
    cross_moments,
    expectation,
    gram,
    known_error,
    references,
    refit_phase,
    refit_timing,
    rotate_active,
    solve_diagonal,
    timing_density,
)
from spatiq.receiver.soft_kernels import received_codebook
from spatiq.receiver.tracking import floored_noise

_WIDE = np.array([10.0, 1.0])  # prior variances of phase and carrier left: nothing is assumed


@dataclass(frozen=True, eq=False)
class Refit:
    """The stage; attributes as in `Tracking`, and `rounds` of refitting."""

    bank: FilterBank
    tables: LinkTables
    clock_std: float
    phase_walk: float
    rounds: int = 2

    def __call__(self, batch: FrameBatch) -> FrameBatch:
        """Refine t0, step, phase, channel, noise; fill symbols and the variances."""
        tables = self.tables
        channels = batch.planes.shape[1]
        shape = (tables.active.size, 2, channels)
        y = np.empty(shape, np.float32)
        reference = np.empty(shape, np.float32)
        payload = np.flatnonzero(tables.active_word >= 0)
        inverse = (1.0 / tables.active_amplitude[payload])[:, None]
        for i in range(batch.count):
            for turn in range(self.rounds):
                self._round(batch, i, y, reference, with_timing=turn == 0)
            batch.symbols[i] = (y[payload, 0] + 1j * y[payload, 1]) * inverse
            slope = _mean_slope(tables.active, batch.phase[i])  # radians per symbol period
            batch.carrier_estimate[i] = batch.carrier[i] + slope / (2 * np.pi * batch.step[i])
        return batch

    def _round(
        self,
        batch: FrameBatch,
        i: int,
        y: NDArray[np.float32],
        reference: NDArray[np.float32],
        with_timing: bool,
    ) -> None:
        """Expectation, then carrier phase, timing, and channel in turn, each given the others."""
        tables, bank = self.tables, self.bank
        channels, antennas = batch.channel[i].shape
        codebook = self._received_codebook(batch.channel[i])
        noise = floored_noise(batch.noise[i], codebook[2])
        sample_periods(
            batch.planes[i], batch.t0[i], batch.step[i], tables.active, bank.taps, bank.phases, y
        )
        rotate_active(y, batch.phase[i])
        mean = tables.known_vectors.copy()
        sxx = np.empty((antennas, antennas), np.complex128)
        syx = np.empty((channels, antennas), np.complex128)
        words = tables.words
        energy = np.empty(tables.codebook.size)
        error = expectation(
            y,
            tables.active_word,
            tables.active_amplitude,
            words.parts,
            codebook,
            noise,
            mean,
            energy,
        )
        gram(words.parts, energy, tables.known_gram, sxx)
        references(batch.channel[i], mean, reference)
        error += known_error(y, reference, tables.active_word)
        before = batch.phase[i].copy()
        batch.frequency_var[i] = refit_phase(
            y, reference, tables.active, noise, _WIDE, self.phase_walk, batch.phase[i]
        )
        if with_timing:
            self._timing(batch, i, before, reference, noise)
        rotate_active(y, batch.phase[i] - before)
        cross_moments(y, mean, syx)
        if not solve_diagonal(sxx, syx, batch.channel[i]):
            # Antennas that the known symbols alone never tell apart keep the least-norm answer.
            batch.channel[i] = syx @ np.linalg.pinv(sxx, hermitian=True)
        batch.antenna_energy[i] = sxx.diagonal().real
        used = int(np.count_nonzero(batch.antenna_energy[i] > 0))
        batch.noise[i] = error / max(channels * (tables.active.size - used) - 2, 1)

    def _received_codebook(
        self, channel: NDArray[np.complex128]
    ) -> tuple[NDArray[np.float32], NDArray[np.float32], NDArray[np.float32]]:
        words = self.tables.words
        real = np.empty((channel.shape[0], words.pointer.size - 1), np.float32)
        imag = np.empty_like(real)
        power = np.empty(real.shape[1], np.float32)
        received_codebook(channel, words.pointer, words.antenna, words.value, real, imag, power)
        return real, imag, power

    def _timing(
        self,
        batch: FrameBatch,
        i: int,
        phase: NDArray[np.float32],
        reference: NDArray[np.float32],
        noise: float,
    ) -> None:
        tables, bank = self.tables, self.bank
        slope = np.empty_like(reference)
        sample_periods(
            batch.planes[i],
            batch.t0[i],
            batch.step[i],
            tables.active,
            bank.slopes,
            bank.phases,
            slope,
        )
        rotate_active(slope, phase)
        out = np.zeros(4)
        step_var = (self.clock_std * bank.samples_per_symbol) ** 2
        density = np.empty(tables.active.size)
        timing_density(reference, tables.active, bank.curvature, density)
        refit_timing(slope, reference, density, tables.active, noise, step_var, out)
        batch.t0[i] += out[0]
        batch.step[i] += out[1]
        batch.timing_var[i], batch.step_var[i] = out[2], out[3]


def _mean_slope(k: NDArray[np.int64], phase: NDArray[np.float32]) -> float:
    """Least-squares slope of a phase track."""
    centred = k - k.mean()
    energy = float(np.sum(centred * centred))
    return float(np.sum(centred * phase.astype(np.float64))) / energy if energy > 0 else 0.0
