"""Acquisition: carrier, timing, channel and noise of each frame from its known symbols alone.

Maximum likelihood over carrier and timing with the channel concentrated out: a grid around the
search's answer, then Fisher scoring. The likelihood of a known vector sequence in an unknown flat
channel is ||W Z||^2 with Z = X^H D_f^H Y (least squares for the channel; see M. Morelli and
U. Mengali, "Carrier-frequency estimation for transmissions over selective channels", IEEE Trans.
Commun. 48(9), 2000).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from spatiq.receiver.acquisition_kernels import acquire_frame
from spatiq.receiver.frame_batch import FrameBatch
from spatiq.receiver.link_tables import LinkTables
from spatiq.receiver.matched_filter import FilterBank, derotate


@dataclass(frozen=True, eq=False)
class Acquisition:
    """The stage.

    Attributes:
        bank, tables: filter bank and link tables.
        carrier_reach: +- uncertainty of the search's carrier, cycles per symbol.
        symbol_rate: symbol periods per second.
        locked_carrier: carrier in Hz when carrier and symbol clock come from one reference: the
            carrier offset then tells the clock offset. None when they do not.
    """

    bank: FilterBank
    tables: LinkTables
    carrier_reach: float
    symbol_rate: float
    locked_carrier: float | None

    def __call__(self, batch: FrameBatch) -> FrameBatch:
        """Fill t0, carrier, channel, noise and the variances; derotate the samples."""
        header = self.tables.header
        span = int(header[-1] - header[0]) + 1
        # A quarter of the main lobe's half width: no maximum can hide between grid points. With
        # payload between known symbols the likelihood has fringes, of which the highest is sought:
        # a sixteenth, or the grid would decide by where it happens to meet them.
        per_lobe = 4 if span == header.size else 16
        points = max(3, 2 * int(np.ceil(self.carrier_reach * per_lobe * span)) + 1)
        grid = np.linspace(-self.carrier_reach, self.carrier_reach, points)
        for i in range(batch.count):
            self._acquire(batch, i, grid)
        channels = batch.planes.shape[1]
        batch.header_freedom = channels * (header.size - self.tables.header_rank) - 1
        return batch

    def _acquire(self, batch: FrameBatch, i: int, grid: NDArray[np.float64]) -> None:
        """Two looks: the first with the search's carrier, the second with the samples derotated."""
        tables = self.tables
        known = (tables.header, *tables.header_vectors.parts)
        for look in (grid, grid[:0]):
            found = acquire_frame(
                batch.planes[i],
                batch.t0[i],
                batch.step[i],
                look,
                known,
                tables.gram_root,
                tables.header_centroid,
                self.bank.parts,
                batch.channel[i],
            )
            batch.t0[i] = found[0]
            residual = found[1] / batch.step[i]  # cycles per symbol -> cycles per sample
            origin = batch.t0[i] + tables.header_centroid * batch.step[i]
            derotate(batch.planes[i], residual, origin)
            batch.carrier[i] += residual
            batch.turns[i] += residual * origin
            if self.locked_carrier is not None:
                sps = self.bank.samples_per_symbol
                offset_hz = batch.carrier[i] * sps * self.symbol_rate
                batch.step[i] = sps / (1.0 + offset_hz / self.locked_carrier)
        batch.noise[i], batch.frequency_var[i], batch.timing_var[i] = found[2], found[3], found[4]
        batch.header_noise[i] = found[2]
