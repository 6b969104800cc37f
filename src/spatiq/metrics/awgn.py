"""Closed forms of symbol and bit error ratios on the additive white Gaussian noise channel.

`eb_n0`, `es_n0`: energy per bit and per symbol over the noise variance per complex sample, as
ratios, not in dB. All functions take arrays and return float64 of the same shape.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import comb, erfc, log_ndtr

from spatiq.errors import InputError

Ratio = NDArray[np.float64]


def gaussian_tail(x: ArrayLike) -> Ratio:
    """Q(x): probability that a standard normal variable exceeds x."""
    return np.asarray(0.5 * erfc(np.asarray(x, dtype=np.float64) / math.sqrt(2.0)))


def bpsk_ber(eb_n0: ArrayLike) -> Ratio:
    """BPSK, and QPSK with Gray labels: Q(sqrt(2 Eb/N0)). Proakis, Digital Communications, ch. 4."""
    return gaussian_tail(np.sqrt(2.0 * np.asarray(eb_n0, dtype=np.float64)))


def psk8_gray_ber(eb_n0: ArrayLike) -> Ratio:
    """8PSK with Gray labels, exact. P. J. Lee, IEEE Trans. Commun. 34, 1986."""
    a = np.sqrt(6.0 * np.asarray(eb_n0, dtype=np.float64))
    p = gaussian_tail(a * math.sin(math.pi / 8))
    q = gaussian_tail(a * math.sin(3 * math.pi / 8))
    return np.asarray((p + q + p * (1 - q) + q * (1 - p)) / 3.0)


def psk8_ser(es_n0: ArrayLike) -> Ratio:
    """8PSK symbol error ratio by Craig's integral over the sector (Proakis, ch. 4)."""
    snr = np.asarray(es_n0, dtype=np.float64)[..., None]
    nodes, weights = np.polynomial.legendre.leggauss(200)
    end = math.pi * 7.0 / 8.0
    theta = 0.5 * end * (nodes + 1.0)
    values = np.exp(-snr * math.sin(math.pi / 8) ** 2 / np.sin(theta) ** 2)
    return np.asarray((values @ weights) * 0.5 * end / math.pi)


def qam_root(size: int) -> int:
    """sqrt(M) of a square QAM. Raises InputError unless M = 4, 16, 64, ..."""
    root = math.isqrt(size)
    if size < 4 or root * root != size or root.bit_count() != 1:
        raise InputError("theory", "M", size, "a square QAM size: 4, 16, 64, 256, ...")
    return root


def gray_qam_terms(size: int) -> tuple[Ratio, Ratio]:
    """Weights w and odd factors f of the exact bit error ratio of Gray square QAM.

    BER = sum_i w_i * 2 Q(f_i sqrt(3 Es / ((M - 1) N0))). K. Cho, D. Yoon, IEEE Trans. Commun.
    50(7), 2002, eq. (14) and (16) from memory.
    """
    root = qam_root(size)
    levels = root.bit_length() - 1
    weight: Ratio = np.zeros(root, np.float64)
    for k in range(1, levels + 1):
        for i in range(root - root // 2**k):
            step = i * 2 ** (k - 1) / root
            sign = (-1) ** math.floor(step)
            weight[i] += sign * (2 ** (k - 1) - math.floor(step + 0.5))
    factor = 2.0 * np.arange(root, dtype=np.float64) + 1.0
    return np.asarray(weight / (root * levels)), np.asarray(factor)


def qam_gray_ber(size: int, eb_n0: ArrayLike) -> Ratio:
    """Square M-QAM with Gray labels, exact. Cho & Yoon, see `gray_qam_terms`."""
    weight, factor = gray_qam_terms(size)
    es_n0 = np.asarray(eb_n0, dtype=np.float64) * math.log2(size)
    unit = np.sqrt(3.0 * es_n0 / (size - 1))
    return np.asarray(2.0 * gaussian_tail(unit[..., None] * factor) @ weight)


def qam_ser(size: int, es_n0: ArrayLike) -> Ratio:
    """Symbol error ratio of square M-QAM: 1 - (1 - s)^2. Proakis, ch. 4."""
    root = qam_root(size)
    snr = np.asarray(es_n0, dtype=np.float64)
    s = 2.0 * (1.0 - 1.0 / root) * gaussian_tail(np.sqrt(3.0 * snr / (size - 1)))
    return np.asarray(s * (2.0 - s))


def orthogonal_ser(size: int, es_n0: ArrayLike) -> Ratio:
    """Coherent detection of M orthogonal signals: space-shift keying with orthonormal columns.

    1 - integral of the normal density at t - sqrt(2 Es/N0) times (1 - Q(t))^(M-1). Proakis, ch. 4.
    """
    mean = np.sqrt(2.0 * np.asarray(es_n0, dtype=np.float64))[..., None]
    nodes, weights = np.polynomial.legendre.leggauss(400)
    u = 12.0 * nodes
    density = np.exp(-0.5 * u * u) / math.sqrt(2.0 * math.pi)
    missed = -np.expm1((size - 1) * log_ndtr(u + mean))
    return np.asarray((missed * density) @ weights * 12.0)


def noncoherent_orthogonal_ser(size: int, es_n0: ArrayLike) -> Ratio:
    """Non-coherent detection of M orthogonal signals (Proakis, ch. 4).

    It is the antenna error of the two-step detector, antenna first by the largest |h^H y|, with PSK
    and orthonormal columns.
    """
    snr = np.asarray(es_n0, dtype=np.float64)
    total = np.zeros_like(snr)
    for k in range(1, size):
        total += (-1) ** (k + 1) * comb(size - 1, k) / (k + 1) * np.exp(-k * snr / (k + 1))
    return np.asarray(total)
