"""Tracking: the first look at the payload, following carrier phase and timing by its decisions.

A two-state Kalman filter each for (phase, carrier) and (timing, clock), run outwards from the known
symbols in short blocks. The reference of a payload period is the posterior mean of H x over all
codewords, so that doubtful decisions weigh little (N. Noels et al., "Turbo synchronization: an EM
algorithm interpretation", Proc. IEEE ICC 2003).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
import scipy.spatial
from numpy.typing import NDArray

from spatiq.receiver.frame_batch import FrameBatch
from spatiq.receiver.link_tables import LinkTables
from spatiq.receiver.matched_filter import FilterBank
from spatiq.receiver.soft_kernels import floored_noise, received_codebook
from spatiq.receiver.tracking_kernels import track_side
from spatiq.signal.codebooks import Codebook

# A timing error of a symbol period's share d displaces symbols by about 1.85 d (the root of
# 4 pi^2 xi, xi = 0.087). A quarter of the way to the nearest decision boundary is left to the
# refit.
_DISPLACEMENT = 1.85
_TOLERATED = 0.25


@dataclass(frozen=True, eq=False)
class Tracking:
    """The stage.

    Attributes:
        bank, tables: filter bank and link tables.
        clock_std: standard deviation expected of the relative clock offset.
        phase_walk: variance of the oscillator's phase walk per symbol period, radians^2.
    """

    bank: FilterBank
    tables: LinkTables
    clock_std: float
    phase_walk: float

    def __call__(self, batch: FrameBatch) -> FrameBatch:
        """Fill phase; correct t0 and step."""
        tables = self.tables
        batch.acquired_timing[:, 0], batch.acquired_timing[:, 1] = batch.t0, batch.step
        batch.acquired_channel[:] = batch.channel
        outside = tables.in_header == 0
        later = np.flatnonzero(outside & (tables.active > tables.header_centroid))
        earlier = np.flatnonzero(outside & (tables.active < tables.header_centroid))[::-1]
        span = float(tables.active[-1] - tables.active[0])
        drift = _DISPLACEMENT * span * 2 * self.clock_std
        with_timing = drift > _TOLERATED * _boundary(tables.codebook)
        size, channels = tables.codebook.vectors.shape[0], batch.planes.shape[1]
        real = np.empty((channels, size), np.float32)
        imag = np.empty((channels, size), np.float32)
        power = np.empty(size, np.float32)
        words = tables.words
        for i in range(batch.count):
            received_codebook(
                batch.channel[i], words.pointer, words.antenna, words.value, real, imag, power
            )
            noise = floored_noise(batch.noise[i], power)
            for order in (later, earlier):
                if order.size:
                    self._track(batch, i, order, (real, imag, power), noise, with_timing)
        return batch

    def _track(
        self,
        batch: FrameBatch,
        i: int,
        order: NDArray[np.int64],
        codebook: tuple[NDArray[np.float32], NDArray[np.float32], NDArray[np.float32]],
        noise: float,
        with_timing: bool,
    ) -> None:
        tables, bank = self.tables, self.bank
        # The header's phase is known as well as its energy allows; the carrier as acquired.
        phase_var = noise / (2.0 * max(float(np.mean(codebook[2])) * tables.header.size, 1e-30))
        step_var = (self.clock_std * bank.samples_per_symbol) ** 2
        prior = np.array([phase_var, batch.frequency_var[i], batch.timing_var[i], step_var])
        track = np.zeros(4)
        vectors, amplitude = tables.active_vectors.parts, tables.active_amplitude
        sent = (tables.active, tables.active_word, vectors, amplitude)
        track_side(
            batch.planes[i],
            batch.t0[i],
            batch.step[i],
            order,
            sent,
            batch.channel[i],
            codebook,
            noise,
            tables.header_centroid,
            prior,
            self.phase_walk,
            bank.parts,
            with_timing,
            batch.phase[i],
            track,
        )
        batch.t0[i] += track[0]
        batch.step[i] += track[1]
        inside = tables.in_header == 1
        distance = tables.active[inside] - tables.header_centroid
        batch.phase[i, inside] = track[2] + track[3] * distance


@lru_cache(maxsize=8)
def _boundary(codebook: Codebook) -> float:
    """Half the smallest distance between vectors of the same active antennas; where each set has
    only one, its amplitude."""
    vectors = codebook.vectors
    nearest = np.inf
    patterns, group = np.unique(vectors != 0, axis=0, return_inverse=True)
    for i in range(len(patterns)):
        members = vectors[group.ravel() == i]
        if len(members) == 1:
            nearest = min(nearest, float(np.linalg.norm(members[0])))
            continue
        places = np.ascontiguousarray(members).view(np.float64)
        distance = np.asarray(scipy.spatial.KDTree(places).query(places, 2)[0])
        nearest = min(nearest, float(distance[:, 1].min()) / 2)
    return nearest
