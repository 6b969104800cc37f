"""Error vector magnitude (EVM) of known noise levels and impairments, as ratios, not percent."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import erfc

from spatiq.metrics.awgn import qam_root

Ratio = NDArray[np.float64]


def data_aided_evm(snr: ArrayLike, fitted_over: int | None = None) -> Ratio:
    """1/sqrt(SNR) against known symbols; times sqrt(1 - 1/N) when one gain is fitted over N."""
    kept = 1.0 if fitted_over is None else math.sqrt(1.0 - 1.0 / fitted_over)
    return np.asarray(kept / np.sqrt(np.asarray(snr, dtype=np.float64)))


def decision_directed_evm(size: int, snr: ArrayLike) -> Ratio:
    """EVM against the decided symbols of square M-QAM: below the truth at low SNR.

    H. A. Mahmoud, H. Arslan, IEEE Trans. Wireless Commun. 8(5), 2009 (formula from memory).

    Args:
        size: M, a square QAM size.
        snr: Es/N0 as a ratio; any shape.

    Raises:
        InputError: M is no square QAM size.
    """
    root = qam_root(size)
    s = np.asarray(snr, dtype=np.float64)[..., None]
    i = np.arange(1, root, dtype=np.float64)
    share = 1.0 - i / root
    beta = 2.0 * i - 1.0
    exponent = 3.0 * beta**2 * s / (2.0 * (size - 1))
    first = 8.0 * np.sqrt(3.0 / (2.0 * math.pi * (size - 1) * s[..., 0]))
    folded = first * (np.exp(-exponent) @ share)
    back = 12.0 / (size - 1) * (erfc(np.sqrt(exponent)) @ (share * beta))
    return np.asarray(np.sqrt(1.0 / s[..., 0] - folded + back))


def image_rejection(gain_db: ArrayLike, phase_deg: ArrayLike) -> Ratio:
    """Power ratio of signal to image for a gain and a phase imbalance between I and Q.

    (1 + 2 g cos p + g^2) / (1 - 2 g cos p + g^2), the common formula; infinite without imbalance.
    """
    g = 10.0 ** (np.asarray(gain_db, dtype=np.float64) / 20.0)
    c = 2.0 * g * np.cos(np.deg2rad(np.asarray(phase_deg, dtype=np.float64)))
    with np.errstate(divide="ignore"):
        return np.asarray((1.0 + c + g * g) / (1.0 - c + g * g))


def imbalance_evm(gain_db: ArrayLike, phase_deg: ArrayLike) -> Ratio:
    """EVM of an uncorrected I/Q imbalance: one over the root of the image rejection."""
    return np.asarray(1.0 / np.sqrt(image_rejection(gain_db, phase_deg)))


def leakage_evm(leakage_dbc: ArrayLike) -> Ratio:
    """EVM of carrier leakage at a level below the carrier, when it is not removed first."""
    return np.asarray(10.0 ** (np.asarray(leakage_dbc, dtype=np.float64) / 20.0))


def phase_noise_evm(rms_deg: ArrayLike) -> Ratio:
    """EVM of Gaussian phase noise of standard deviation sigma: sqrt(2 - 2 exp(-sigma^2 / 2))."""
    sigma = np.deg2rad(np.asarray(rms_deg, dtype=np.float64))
    return np.asarray(np.sqrt(-2.0 * np.expm1(-0.5 * sigma**2)))


def residual_offset_evm(cycles: ArrayLike) -> Ratio:
    """EVM of a carrier offset of `cycles` over the frame, one complex gain fitted to the frame."""
    return np.asarray(np.sqrt(1.0 / np.sinc(np.asarray(cycles, dtype=np.float64)) ** 2 - 1.0))


def sine_quantisation_snr_db(bits: int) -> float:
    """Signal to quantisation noise of a full-scale sine, 6.02 b + 1.76 dB; for sines only."""
    return 20.0 * bits * math.log10(2.0) + 10.0 * math.log10(1.5)
