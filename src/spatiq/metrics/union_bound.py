"""Union bounds of the bit error ratio of any codebook, averaged over Rayleigh or for one channel.

BEP <= 1/(C b) sum_i sum_{j != i} d_H(i, j) P(i -> j), maximum-likelihood detection, channel known.
J. Jeganathan, A. Ghrayeb, L. Szczecinski, IEEE Commun. Lett. 12(8), 2008. It is loose above about
5e-3: there it is a bound, not a prediction.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import ArrayLike, NDArray

from spatiq.errors import InputError
from spatiq.metrics.awgn import gaussian_tail
from spatiq.metrics.differential_theory import differential_rayleigh_bound
from spatiq.metrics.fading import rayleigh_tail
from spatiq.signal.codebooks import Codebook, DifferentialCodebook


def _bound(
    codebook: Codebook,
    points: NDArray[np.complex128],
    pairwise: Callable[[NDArray[np.float64]], NDArray[np.float64]],
) -> NDArray[np.float64]:
    """Sum d_H * pairwise(||p_i - p_j||^2) row by row; points (C, n), pairwise: (C,) -> (C,
    n_snr)."""
    if codebook.bits == 0:
        raise InputError("union bound", "codebook", "no bits per word", "at least one bit")
    words = np.arange(codebook.size, dtype=np.int64)
    wrong_bits = codebook.words_to_bits(words[:, None]).sum(axis=1).astype(np.float64)
    total: NDArray[np.float64] = np.zeros(1)
    for i in range(codebook.size):
        squared = np.sum(np.abs(points - points[i]) ** 2, axis=1)
        others = words != i
        total = total + wrong_bits[(words ^ i)[others]] @ pairwise(squared[others])
    return np.asarray(total / (codebook.size * codebook.bits))


def rayleigh_union_bound(
    codebook: Codebook, receivers: int, es_n0: ArrayLike
) -> NDArray[np.float64]:
    """Union bound over i.i.d. Rayleigh: P(x -> x') = G(Nr, rho ||x - x'||^2 / 4).

    Args:
        codebook: transmit vectors; distances are taken between whole vectors, which covers the same
            antenna and different antennas alike.
        receivers: Nr.
        es_n0: rho = 1/N0 for E|h|^2 = 1, as a ratio; any shape.

    Returns:
        float64, shape of `es_n0`; may exceed 1/2 at low ratios. Of the differential form, for
        detection without channel knowledge.
    """
    if isinstance(codebook, DifferentialCodebook):
        return differential_rayleigh_bound(codebook, receivers, es_n0)
    rho = np.asarray(es_n0, dtype=np.float64)

    def pairwise(squared: NDArray[np.float64]) -> NDArray[np.float64]:
        return rayleigh_tail(receivers, squared[:, None] * rho.ravel() / 4.0)

    return _bound(codebook, codebook.vectors, pairwise).reshape(rho.shape)


def fixed_channel_union_bound(
    codebook: Codebook, h: ArrayLike, n0: ArrayLike
) -> NDArray[np.float64]:
    """Union bound on one known channel: P(x -> x') = Q(sqrt(||H (x - x')||^2 / (2 N0))).

    Exact for two words, so for two-antenna space-shift keying.

    Args:
        codebook: transmit vectors, (C, Nt).
        h: complex, shape (Nr, Nt).
        n0: noise variance per complex component; any shape.

    Returns:
        float64, shape of `n0`.

    Raises:
        InputError: h of another shape, or a codebook of the differential form.
    """
    if codebook.block > 1:
        raise InputError("union bound", "codebook", codebook.scheme, "words of one symbol period")
    channel = np.asarray(h, dtype=np.complex128)
    if channel.ndim != 2 or channel.shape[1] != codebook.antennas:
        raise InputError("union bound", "H", f"shape {channel.shape}", f"(Nr, {codebook.antennas})")
    noise = np.asarray(n0, dtype=np.float64)

    def pairwise(squared: NDArray[np.float64]) -> NDArray[np.float64]:
        return gaussian_tail(np.sqrt(squared[:, None] / (2.0 * noise.ravel())))

    return _bound(codebook, codebook.vectors @ channel.T, pairwise).reshape(noise.shape)
