"""Delays of the receive channels from known symbols alone, wherever within a few symbol periods.

For each channel by itself the energy of the known symbols' projection is sought over time: the
likelihood of acquisition, one channel at a time.
"""

from __future__ import annotations

import numpy as np
import scipy.stats
from numpy.typing import NDArray

from spatiq.receiver.acquisition_kernels import parabola_top
from spatiq.receiver.delayed_antennas import DelayKernels, delay_kernels
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


class KnownCorrelations:
    """Known symbols of a link against each other, for fits of delayed antennas.

    Attributes:
        used: int64 (A,); antennas that send known symbols or words.
        sent: complex128 (Kh, A); their known symbols.
        lagged: complex128 (2 D + 1, A, A); sum over k of conj(x_k[a]) x_{k+d}[b], at [D + d, a, b].
    """

    def __init__(self, tables: LinkTables, reach: int) -> None:
        """Correlate the known symbols of sync and pilots over -reach..reach periods."""
        known = tables.known_vectors.astype(np.complex128)
        self.used = np.flatnonzero(np.any(known != 0, axis=0)).astype(np.int64)
        inside = tables.in_header == 1
        self.sent = known[inside][:, self.used]
        first = int(tables.header[0])
        dense = np.zeros((int(tables.header[-1]) - first + 1, self.used.size), np.complex128)
        dense[tables.header - first] = self.sent
        padded = np.pad(dense, ((reach, reach), (0, 0)))
        shifts = range(2 * reach + 1)
        self.lagged = np.stack([dense.conj().T @ padded[s : s + len(dense)] for s in shifts])

    def gram(self, kernels: DelayKernels) -> NDArray[np.complex128]:
        """sum over k, d of conj(x_k[a]) x_{k+d}[b] g(d + tau_b - tau_a), at [b, a]."""
        return np.asarray(np.einsum("dab,abd->ba", self.lagged, kernels.value), np.complex128)


def antenna_delays(
    planes: NDArray[np.float32],
    t0: float,
    step: float,
    correlations: KnownCorrelations,
    tables: LinkTables,
    bank: FilterBank,
) -> tuple[NDArray[np.float64], NDArray[np.complex128]]:
    """How late each antenna is against t0, symbol periods, (A,), and the channel (Nr, A).

    Least squares over known symbols that interfere with each other as the pulse says, what is
    unknown taken for noise; one antenna's delay at a time, the largest likelihood on a grid.
    """
    grid = offset_grid(_REACH)
    y = header_outputs(planes, t0, step, grid, tables, bank)
    cross = np.einsum("ka,gkr->gra", correlations.sent.conj(), y, optimize=True)

    def fit(places: NDArray[np.int64]) -> tuple[float, NDArray[np.complex128]]:
        gram = correlations.gram(delay_kernels(bank, grid[places]))
        chosen = cross[places, :, np.arange(places.size)].T
        channel = chosen @ np.linalg.pinv(gram, hermitian=True, rcond=1e-6)
        return float(np.sum((channel * chosen.conj()).real)), channel

    energy = np.sum(np.abs(cross) ** 2, axis=1)
    places = np.argmax(energy, axis=0).astype(np.int64)
    best, channel = fit(places)
    for _ in range(_SWEEPS):
        moved = False
        for a in range(places.size):
            for g in range(max(0, places[a] - _NEAR), min(grid.size, places[a] + _NEAR + 1)):
                tried = places.copy()
                tried[a] = g
                found, candidate = fit(tried)
                if found > best:
                    best, channel, places, moved = found, candidate, tried, True
        if not moved:
            break
    return grid[places], channel


_REACH = 1.25  # symbol periods: antennas half a period either way, t0 with any of them
_SWEEPS = 3
_NEAR = 4  # grid steps either side of an antenna's own best place
