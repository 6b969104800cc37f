"""Slow functions of time: what a fading channel coefficient can be within a frame.

A coefficient whose Doppler spectrum lies within +-W has the autocorrelation sinc(2 W tau) when all
shifts in between are equally likely: the choice that loses least when the true spectrum is another
one (Y. Li, L. J. Cimini, N. R. Sollenberger, IEEE Trans. Commun. 46(7), 1998; from memory). The
eigenfunctions of that autocorrelation over a frame are the discrete prolate spheroidal sequences
(D. Slepian, Bell Syst. Tech. J. 57(5), 1978); as a channel basis: T. Zemen, C. F. Mecklenbräuker,
IEEE Trans. Signal Process. 53(9), 2005 (from memory).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.signal.windows import dpss

_LEAST = 1e-7  # share of a coefficient's power that may be left out
_TURN = 2.4e-3  # Doppler times block length: error of a constant channel in the block, -51 dB


@dataclass(frozen=True, eq=False)
class SlowBasis:
    """Functions of unit total variance at the centres of blocks of symbol periods.

    Attributes:
        bandwidth: W, cycles per symbol period; 0 for a constant.
        values: float64 (B, Q); rows have about unit norm: values @ CN(0, I) has the
            autocorrelation sinc(2 W tau).
    """

    bandwidth: float
    values: NDArray[np.float64]


def longest_block(bandwidth: float) -> int:
    """Symbol periods over which a channel of this bandwidth may be taken for constant."""
    return max(1, int(_TURN / bandwidth)) if bandwidth > 0 else 1 << 30


def slow_basis(bandwidth: float, blocks: int, length: int) -> SlowBasis:
    """Basis over `blocks` blocks of `length` symbol periods each."""
    if bandwidth == 0.0 or blocks < 2:
        return SlowBasis(bandwidth, np.ones((blocks, 1)))
    product = bandwidth * length * blocks
    count = min(blocks, int(2 * product) + 12)
    if 2 * product >= blocks:
        return SlowBasis(bandwidth, np.eye(blocks))
    functions, shares = dpss(blocks, product, count, return_ratios=True)
    power = np.maximum(shares, 0.0) / (2 * bandwidth * length)
    kept = power > _LEAST * blocks
    kept[0] = True
    return SlowBasis(bandwidth, np.ascontiguousarray((functions * np.sqrt(power)[:, None])[kept].T))
