"""Lower bounds of the variance of estimators, to judge the estimators and to give intervals.

`snr`, `es_n0`: ratios per complex sample or symbol, not in dB. With spatial modulation count only
the pilots of the antenna concerned.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import ArrayLike, NDArray

Bound = NDArray[np.float64]


def tone_frequency(samples: int, snr: ArrayLike) -> Bound:
    """Variance of a tone's frequency, (cycles per sample)^2; amplitude and phase unknown.

    D. C. Rife, R. R. Boorstyn, IEEE Trans. Inf. Theory 20(5), 1974.
    """
    n = float(samples)
    return 6.0 / (4.0 * math.pi**2 * np.asarray(snr, dtype=np.float64) * n * (n * n - 1.0))


def tone_phase(samples: int, snr: ArrayLike, frequency_known: bool = False) -> Bound:
    """Variance of a tone's phase at its first sample, or, frequency known, anywhere; rad^2.

    At the centre of the samples an unknown frequency costs nothing: use `frequency_known`.
    """
    n = float(samples)
    s = np.asarray(snr, dtype=np.float64)
    if frequency_known:
        return 1.0 / (2.0 * n * s)
    return (2.0 * n - 1.0) / (s * n * (n + 1.0))


def modified_offset(symbols: int, es_n0: ArrayLike) -> Bound:
    """Modified bound of the carrier offset times the symbol period, data known.

    A. N. D'Andrea, U. Mengali, R. Reggiannini, IEEE Trans. Commun. 42, 1994.
    """
    return 3.0 / (2.0 * math.pi**2 * float(symbols) ** 3 * np.asarray(es_n0, dtype=np.float64))


def modified_phase(symbols: int, es_n0: ArrayLike) -> Bound:
    """Modified bound of the carrier phase, rad^2, data known (as `modified_offset`)."""
    return 1.0 / (2.0 * symbols * np.asarray(es_n0, dtype=np.float64))


def modified_timing(symbols: int, es_n0: ArrayLike, rolloff: float) -> Bound:
    """Modified bound of the timing over the symbol period, data known, root-raised-cosine pulse."""
    spread = rrc_mean_square_bandwidth(rolloff)
    return 1.0 / (8.0 * math.pi**2 * spread * symbols * np.asarray(es_n0, dtype=np.float64))


def rrc_mean_square_bandwidth(rolloff: float) -> float:
    """xi = T^2 * mean of f^2 over the pulse's energy spectrum: 1/12 + a^2 (1/4 - 2/pi^2).

    U. Mengali, A. N. D'Andrea, Synchronization Techniques for Digital Receivers, 1997.
    """
    return 1.0 / 12.0 + rolloff**2 * (0.25 - 2.0 / math.pi**2)


def two_block_offset(block: int, snr: ArrayLike) -> Bound:
    """Variance of the offset from two identical blocks of L samples, (cycles per sample)^2.

    At high SNR; 4/3 above the bound of 2L samples. P. H. Moose, IEEE Trans. Commun. 42(10), 1994.
    """
    return 1.0 / (4.0 * math.pi**2 * float(block) ** 3 * np.asarray(snr, dtype=np.float64))


def known_vectors_offset(vectors: ArrayLike, channel: ArrayLike, n0: float) -> float:
    """Cramer-Rao bound of the carrier offset, (radians per symbol)^2, from known vectors.

    The flat channel is unknown, and so costs what of k X H^T its column space explains. One antenna
    sending without a pause gives `tone_frequency`, in radians (after D. C. Rife and R. R. Boorstyn,
    1974).

    Args:
        vectors: complex (K, Nt); transmit vectors of consecutive symbol periods, 0 where nothing is
            known.
        channel: complex (Nr, Nt).
        n0: noise variance per received symbol.
    """
    x = np.asarray(vectors, dtype=np.complex128)
    periods = np.flatnonzero(np.any(x != 0, axis=1))
    rows = x[periods]
    slope = periods[:, None] * (rows @ np.asarray(channel, dtype=np.complex128).T)
    fitted = rows @ np.linalg.lstsq(rows, slope, rcond=None)[0]
    return float(n0 / (2.0 * np.sum(np.abs(slope - fitted) ** 2)))


def known_vectors_timing(
    vectors: ArrayLike, channel: ArrayLike, n0: float, rolloff: float
) -> float:
    """Modified bound of the timing over the symbol period from known vectors: `modified_timing`.

    Arguments as for `known_vectors_offset`; L Es is the energy received in all channels.
    """
    received = np.asarray(vectors, np.complex128) @ np.asarray(channel, np.complex128).T
    return float(modified_timing(1, np.sum(np.abs(received) ** 2) / n0, rolloff))


def least_squares_channel(pilots: ArrayLike, n0: float) -> Bound:
    """Error variance of each entry of the least-squares channel, per transmit antenna, (Nt,).

    N0 * diag((P P^H)^-1) for pilots P, complex, shape (Nt, Np); N0/Np for Np unit pilots sent from
    one antenna. M. Biguesh, A. B. Gershman, IEEE Trans. Signal Process. 54(3), 2006.
    """
    p = np.atleast_2d(np.asarray(pilots, dtype=np.complex128))
    return np.asarray(n0 * np.real(np.diag(np.linalg.inv(p @ p.conj().T))))


def noise_variance(n0: float, pilots: int, coefficients: int) -> float:
    """Variance of the unbiased noise estimate from residuals after fitting K coefficients to Np."""
    return n0**2 / (pilots - coefficients)
