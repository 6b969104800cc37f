"""Delays of the receive channels from known symbols alone, wherever within a few symbol periods.

For each channel by itself the energy of the known symbols' projection is sought over time: the
likelihood of acquisition, one channel at a time.
"""

from __future__ import annotations

import numpy as np
import scipy.stats
from numpy.typing import NDArray

from spatiq.receiver.acquisition_kernels import parabola_top
from spatiq.receiver.link_tables import LinkTables
from spatiq.receiver.matched_filter import FilterBank, sample_periods

_CHANCE = 1e-6
_SPACING = 0.125  # symbol periods between the instants tried


def header_outputs(
    planes: NDArray[np.float32],
    t0: float,
    step: float,
    offsets: NDArray[np.float64],
    tables: LinkTables,
    bank: FilterBank,
) -> NDArray[np.complex128]:
    """Matched-filter outputs of the known symbols, each read late by offsets, (G, Kh, Nr)."""
    header = tables.header
    room = np.empty((header.size, 2, planes.shape[0]), np.float32)
    out = np.empty((offsets.size, header.size, planes.shape[0]), np.complex128)
    for g in range(offsets.size):
        late = t0 + offsets[g] * step
        sample_periods(planes, late, step, header, bank.taps, bank.phases, room)
        out[g] = room[:, 0] + 1j * room[:, 1]
    return out


def offset_grid(reach: float) -> NDArray[np.float64]:
    """Offsets from -reach to reach, symbol periods."""
    count = int(np.ceil(reach / _SPACING))
    return np.asarray(np.arange(-count, count + 1) * _SPACING, np.float64)


def receive_delays(
    planes: NDArray[np.float32],
    t0: float,
    step: float,
    reach: float,
    tables: LinkTables,
    bank: FilterBank,
) -> NDArray[np.float64]:
    """How late each receive channel is against t0, symbol periods, (Nr,).

    NaN where no instant shows more of the known symbols than noise does at chance `_CHANCE`.
    """
    grid = offset_grid(reach)
    y = header_outputs(planes, t0, step, grid, tables, bank)
    known = tables.known_vectors[tables.in_header == 1].astype(np.complex128)
    projected = np.einsum("pa,ka,gkr->gpr", tables.gram_root, known.conj(), y, optimize=True)
    likelihood = np.sum(np.abs(projected) ** 2, axis=1)
    energy = np.sum(np.abs(y) ** 2, axis=1)
    rank = tables.header_rank
    limit = scipy.stats.beta.isf(_CHANCE / grid.size, rank, tables.header.size - rank)
    delays = np.full(planes.shape[0], np.nan)
    for r in range(delays.size):
        top = int(np.argmax(likelihood[:, r]))
        if likelihood[top, r] <= limit * energy[top, r]:
            continue
        delays[r] = grid[top]
        if 0 < top < grid.size - 1:
            delays[r] += _SPACING * parabola_top(*likelihood[top - 1 : top + 2, r])
    return delays
