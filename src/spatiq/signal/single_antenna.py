"""Schemes in which one antenna is active per symbol period."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from spatiq.signal.codebook import SINGLE, Codebook, assemble
from spatiq.signal.constellations import Constellation


def spatial_modulation(
    antennas: int,
    constellation: Constellation,
    antenna_order: Sequence[int],
    spatial_positions: Sequence[int],
) -> Codebook:
    """One active antenna per symbol period; antenna and symbol carry bits.

    Method: R. Mesleh et al., "Spatial modulation", IEEE Trans. Veh. Technol. 57(4), 2008.

    Args:
        antennas: Nt, number of transmit antennas.
        constellation: M points indexed by label.
        antenna_order: 2^k antenna indices; entry v is the antenna that spatial value v selects.
        spatial_positions: k positions in the word (0 = first bit) that carry the spatial value, its
            most significant bit first; the symbol's label takes the remaining positions in order.
    """
    patterns = np.zeros((len(antenna_order), constellation.size, antennas), np.complex128)
    for value, antenna in enumerate(antenna_order):
        patterns[value, :, antenna] = constellation.points
    scheme = "spatial-modulation" if constellation.bits else "space-shift-keying"
    active = [(int(a),) for a in antenna_order]
    return assemble(scheme, patterns, active, constellation, spatial_positions)


def space_shift_keying(
    antennas: int, antenna_order: Sequence[int], spatial_positions: Sequence[int]
) -> Codebook:
    """Only the antenna carries bits; every antenna sends the symbol 1.

    Method: J. Jeganathan et al., "Space shift keying modulation for MIMO channels", IEEE J. Lightw.
    Technol. 27, 2009.
    """
    return spatial_modulation(antennas, SINGLE, antenna_order, spatial_positions)
