"""The two-step detector of the first papers, for comparison: antenna first, then its symbol.

Source: R. Mesleh et al., "Spatial modulation", IEEE Trans. Veh. Technol. 57(4), 2008, with the
metric divided by the norm of the channel column, as it must be when the columns differ in norm.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError
from spatiq.receiver.detection_kernels import detect_two_step
from spatiq.signal.codebooks import Codebook


def two_step(
    y: NDArray[np.complex64], channel: NDArray[np.complex128], noise: float, codebook: Codebook
) -> NDArray[np.int64]:
    """Antenna by maximum-ratio combining, then the symbol given the antenna.

    Raises:
        InputError: for codebooks in which a set has more than one active antenna.
    """
    plan = _two_step_plan(codebook)
    columns = np.ascontiguousarray(channel[:, plan.antennas].T).astype(np.complex64)
    words = np.empty(y.shape[0], np.int64)
    detect_two_step(y, columns, plan.members, plan.counts, plan.values, words)
    return words


@dataclass(frozen=True, eq=False)
class _TwoStepPlan:
    """Words of each antenna (A, C), how many (A,), the antennas (A,), symbol of each word (C,)."""

    members: NDArray[np.int64]
    counts: NDArray[np.int64]
    antennas: NDArray[np.int64]
    values: NDArray[np.complex64]


@lru_cache(maxsize=8)
def _two_step_plan(codebook: Codebook) -> _TwoStepPlan:
    if not codebook.single_antenna:
        raise InputError(
            "receiver options", "detector", "two-step", "one active antenna per symbol period"
        )
    sets = len(codebook.antenna_sets)
    members = np.full((sets, codebook.size), -1, np.int64)
    counts = np.zeros(sets, np.int64)
    for c in range(codebook.size):
        s = codebook.set_index[c]
        members[s, counts[s]] = c
        counts[s] += 1
    antennas = np.array([s[0] for s in codebook.antenna_sets], np.int64)
    values = codebook.vectors[np.arange(codebook.size), antennas[codebook.set_index]]
    return _TwoStepPlan(members, counts, antennas, values.astype(np.complex64))
