"""Closed forms of error ratios on Rayleigh and Rician fading with several receive antennas.

Noise and channel as in `awgn`; E|h|^2 = 1 per pair of antennas, so that `es_n0` is the mean ratio
per receive antenna. All functions take arrays and return float64 of the same shape.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import comb

from spatiq.metrics.awgn import gray_qam_terms, qam_root

Ratio = NDArray[np.float64]


def rayleigh_tail(branches: int, gamma: ArrayLike) -> Ratio:
    """G(L, gamma): mean of Q(sqrt(2 gamma sum_l |h_l|^2)) over L i.i.d. Rayleigh branches.

    Bit error ratio of BPSK with maximum-ratio combining at mean Eb/N0 `gamma` per branch. Proakis,
    Digital Communications, eq. (14.4-15). 1 - sqrt(g/(1+g)) is formed without cancellation.
    """
    g = np.asarray(gamma, dtype=np.float64)
    root = np.sqrt(g / (1.0 + g))
    mu = 0.5 / ((1.0 + g) * (1.0 + root))
    series = np.zeros_like(g)
    for k in range(branches):
        series += comb(branches - 1 + k, k) * (1.0 - mu) ** k
    return np.asarray(mu**branches * series)


def bpsk_rayleigh_ber(branches: int, eb_n0: ArrayLike) -> Ratio:
    """BPSK or Gray QPSK, L-branch maximum-ratio combining, Eb/N0 per branch."""
    return rayleigh_tail(branches, eb_n0)


def qam_gray_rayleigh_ber(size: int, branches: int, eb_n0: ArrayLike) -> Ratio:
    """Square M-QAM with Gray labels: the sum of Cho & Yoon averaged term by term."""
    weight, factor = gray_qam_terms(size)
    unit = 1.5 * np.asarray(eb_n0, dtype=np.float64) * math.log2(size) / (size - 1)
    return np.asarray(2.0 * rayleigh_tail(branches, unit[..., None] * factor**2) @ weight)


def qam_rayleigh_ser(size: int, branches: int, es_n0: ArrayLike) -> Ratio:
    """Square M-QAM symbol error ratio with maximum-ratio combining.

    M. K. Simon, M.-S. Alouini, Digital Communication over Fading Channels, from memory: Q and Q^2
    as integrals over theta to pi/2 and pi/4, the exponential averaged over the fading.
    """
    share = 1.0 - 1.0 / qam_root(size)
    snr = 1.5 * np.asarray(es_n0, dtype=np.float64)[..., None] / (size - 1)
    nodes, weights = np.polynomial.legendre.leggauss(200)

    def averaged(end: float) -> Ratio:
        sine = np.sin(0.5 * end * (nodes + 1.0)) ** 2
        return np.asarray(((sine / (sine + snr)) ** branches @ weights) * 0.5 * end / math.pi)

    return 4.0 * share * averaged(math.pi / 2) - 4.0 * share**2 * averaged(math.pi / 4)


def ssk_rayleigh_bound(antennas: int, receivers: int, es_n0: ArrayLike) -> Ratio:
    """Space-shift keying bit error ratio: exact for two antennas, the union bound above.

    (Nt/2) G(Nr, rho/2). J. Jeganathan et al., IEEE J. Lightw. Technol. 27, 2009.
    """
    half = np.asarray(es_n0, dtype=np.float64) / 2.0
    return np.asarray(0.5 * antennas * rayleigh_tail(receivers, half))


def ssk_rician_ber(receivers: int, es_n0: ArrayLike, k_factor: ArrayLike) -> Ratio:
    """Two-antenna space-shift keying, exact, Rician with equal line-of-sight vectors.

    The common part cancels in the difference: rho becomes rho/(1 + K). Exactness: M. Di Renzo,
    H. Haas, IEEE Trans. Commun. 59(1), 2011. `k_factor` is a ratio, not in dB.
    """
    rho = np.asarray(es_n0, dtype=np.float64) / (1.0 + np.asarray(k_factor, dtype=np.float64))
    return ssk_rayleigh_bound(2, receivers, rho)
