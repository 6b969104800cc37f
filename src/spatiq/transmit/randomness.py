"""Random streams: each purpose has its own, so that adding one does not disturb the others."""

from __future__ import annotations

from enum import IntEnum

import numpy as np


class Purpose(IntEnum):
    """What random numbers are drawn for; part of the key of each stream, so never renumbered."""

    STARTS = 1
    CHANNEL = 2
    CARRIER = 3
    DATA = 4
    FRONT_END = 5
    GAIN = 6
    LOSSES = 7


def generator(seed: int, purpose: Purpose, *key: int) -> np.random.Generator:
    """Generator of one purpose and place; the same arguments give the same numbers."""
    sequence = np.random.SeedSequence(seed, spawn_key=(int(purpose), *key))
    return np.random.Generator(np.random.SFC64(sequence))
