"""Small codebooks of every scheme: what contract suites run over."""

from __future__ import annotations

import numpy as np

from spatiq.signal.codebooks import (
    Codebook,
    differential_spatial_modulation,
    generalised_space_shift_keying,
    generalised_spatial_modulation,
    quadrature_spatial_modulation,
    space_shift_keying,
    spatial_modulation,
    vector_table,
)
from spatiq.signal.constellations import Constellation, named
from spatiq.signal.differential import first_permutations
from spatiq.signal.several_antennas import first_sets

# Three antennas, eight words, four antenna sets; mean total power 1.
_THREE = np.array(
    [
        [1, 0, 0], [-1, 0, 0], [0, 1, 0], [0, -1, 0],
        [0, 0, 1], [0, 0, -1], [0.6, 0.8j, 0], [-0.6, -0.8j, 0],
    ],
    np.complex128,
)  # fmt: skip
# One antenna at a time, with three, three and two symbols.
_ALONE = np.array(
    [
        [1, 0, 0], [-1, 0, 0], [1j, 0, 0], [0, 1j, 0],
        [0, -1j, 0], [0, -1, 0], [0, 0, 2], [0, 0, -1],
    ],
    np.complex128,
)  # fmt: skip
_UNEVEN = Constellation("two rings", np.array([1.2, 1.2j, -0.7, -0.7j]) / np.sqrt(0.965))


def scheme_examples() -> dict[str, list[Codebook]]:
    """Codebooks by registered scheme, of mean total power 1."""
    qpsk, bpsk = named("QPSK"), named("BPSK")
    pairs = first_sets(4, 2)
    return {
        "spatial-modulation": [
            spatial_modulation(2, bpsk, [0, 1], [0]),
            spatial_modulation(4, qpsk, [0, 1, 2, 3], [0, 1]),
            spatial_modulation(4, named("16QAM", "802.11"), [3, 1, 0, 2], [4, 5]),
            spatial_modulation(5, named("8PSK"), [4, 2], [1]),
            spatial_modulation(1, named("64QAM"), [0], []),
            spatial_modulation(2, _UNEVEN, [1, 0], [1]),
        ],
        "space-shift-keying": [
            space_shift_keying(2, [0, 1], [0]),
            space_shift_keying(8, [7, 6, 5, 4, 3, 2, 1, 0], [2, 0, 1]),
        ],
        "generalised-spatial-modulation": [
            generalised_spatial_modulation(4, qpsk, pairs, [0, 1]),
            generalised_spatial_modulation(4, qpsk, pairs, [4, 5], "independent"),
            generalised_spatial_modulation(5, bpsk, [[3, 0, 1], [2, 4, 0]], [1], "independent"),
            generalised_spatial_modulation(3, named("8PSK"), [[0], [1, 2]], [0]),
        ],
        "generalised-space-shift-keying": [
            generalised_space_shift_keying(5, first_sets(5, 2), [0, 1, 2]),
            generalised_space_shift_keying(3, [[0, 1], [2]], [0]),
        ],
        "quadrature-spatial-modulation": [
            quadrature_spatial_modulation(2, qpsk, [0, 1], [0, 1]),
            quadrature_spatial_modulation(5, named("16QAM"), [4, 1, 0, 3], [7, 0, 2, 5]),
        ],
        "differential-spatial-modulation": [
            differential_spatial_modulation(2, bpsk, first_permutations(2), [0]),
            differential_spatial_modulation(2, named("8PSK"), [[1, 0], [0, 1]], [3]),
            differential_spatial_modulation(3, qpsk, first_permutations(3), [6, 1]),
            differential_spatial_modulation(4, bpsk, first_permutations(4), [0, 1, 2, 3]),
        ],
        "vector-table": [
            vector_table(_THREE, True),
            vector_table(_THREE, False, [0]),
            vector_table(_ALONE, True),
        ],
    }
