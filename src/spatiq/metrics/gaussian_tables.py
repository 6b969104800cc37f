"""Gaussian tail, density and exponential by linear interpolation, for loops over pairs of words.

Kernels are compiled with the tables as constants. Relative errors: below 2e-4 for tail and density
(largest at the end of the table), below 4e-5 for the exponential: far below what predictions need.
"""

from __future__ import annotations

import math

import numpy as np
from scipy.special import erfc

from spatiq.kernels import kernel

TAIL_STEPS = 256.0
TAIL_END = 8.0
_z = np.arange(int(TAIL_END * TAIL_STEPS) + 2) / TAIL_STEPS
_TAIL = 0.5 * erfc(_z / math.sqrt(2.0))
_DENSITY = np.exp(-0.5 * _z**2) / math.sqrt(2.0 * math.pi)

DECAY_STEPS = 64.0
DECAY_END = 16.0
_DECAY = np.exp(-np.arange(int(DECAY_END * DECAY_STEPS) + 2) / DECAY_STEPS).astype(np.float32)
_DECAY_STEPS = np.float32(DECAY_STEPS)


@kernel
def tail(z: float) -> float:
    """Q(z), the Gaussian tail, for z >= 0."""
    if z >= TAIL_END:
        return 0.5 * math.erfc(z / math.sqrt(2.0))
    place = z * TAIL_STEPS
    k = int(place)
    rest = place - k
    return float(_TAIL[k] + rest * (_TAIL[k + 1] - _TAIL[k]))


@kernel
def density(z: float) -> float:
    """Standard normal density at z >= 0."""
    if z >= TAIL_END:
        return math.exp(-0.5 * z * z) / math.sqrt(2.0 * math.pi)
    place = z * TAIL_STEPS
    k = int(place)
    rest = place - k
    return float(_DENSITY[k] + rest * (_DENSITY[k + 1] - _DENSITY[k]))


@kernel
def decay(t: float) -> float:
    """exp(-t) for 0 <= t <= 16, the range in which words count as near."""
    place = t * _DECAY_STEPS
    k = int(place)
    rest = place - k
    return float(_DECAY[k] + rest * (_DECAY[k + 1] - _DECAY[k]))
