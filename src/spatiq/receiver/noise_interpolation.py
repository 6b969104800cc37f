"""Interpolation of noise that is correlated in time, over all receive channels jointly.

A vector autoregression, fitted to what a frame's fit leaves, gives the inverse Q of the noise's
covariance over time and channels. What a period's noise is, given that of all other periods, has
mean d_k - C_k (Q d)_k and covariance C_k = (Q_kk)^-1: for long frames the inverse of the mean of
the inverse spectrum (P. Masani, Acta Math. 104, 1960; A. N. Kolmogorov's theorem for one channel).
Order: H. Akaike, IEEE Trans. Autom. Control 19(6), 1974. Past and future serve alike: the mean of
the forward and the backward regression's Q, so that a frame's ends have one of them at least.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Complex = NDArray[np.complex128]
_ORDERS = (1, 2, 3, 4, 6, 8, 12, 16, 24, 32)
_MOST_SHARE = 0.05  # of the periods: no more coefficients of one channel than that


@dataclass(frozen=True, eq=False)
class Regression:
    """d_n = - sum over m of A_m d_(n-m) + e_n.

    Attributes:
        taps: complex128 (p + 1, Nr, Nr); A, the first one the identity.
        precision: complex128 (Nr, Nr); inverse covariance of e.
    """

    taps: Complex
    precision: Complex

    def spectrum(self, frequency: NDArray[np.float64]) -> Complex:
        """Power spectrum (n, Nr, Nr) at frequencies in cycles per period."""
        turns = np.exp(-2j * np.pi * np.multiply.outer(frequency, np.arange(self.taps.shape[0])))
        whitening = np.einsum("fm,mrs->frs", turns, self.taps)
        inverse = whitening.conj().transpose(0, 2, 1) @ self.precision @ whitening
        return np.asarray(np.linalg.inv(inverse))


def fit_regression(noise: Complex) -> Regression:
    """Vector autoregression of noise (K, Nr) by least squares, its order by Akaike's criterion."""
    periods, channels = noise.shape
    orders = [p for p in _ORDERS if p * channels <= _MOST_SHARE * periods] or [1]
    most = orders[-1]
    columns = np.concatenate([noise[most - m : periods - m] for m in range(most + 1)], axis=1)
    moments = columns.conj().T @ columns / (periods - most)  # of conj, so that rows combine
    least = 1e-12 * max(float(np.trace(moments).real) / moments.shape[0], 1e-300)
    moments = moments + least * np.eye(moments.shape[0])
    best, found = np.inf, None
    for p in orders:
        past = slice(channels, channels * (p + 1))
        weights = np.linalg.solve(moments[past, past], moments[past, :channels])
        left = moments[:channels, :channels] - moments[:channels, past] @ weights
        sign, log_determinant = np.linalg.slogdet(left)
        score = (periods - most) * log_determinant + 2 * channels**2 * p
        if sign.real > 0 and score < best:
            best, found = score, (weights, left)
    if found is None:
        raise ValueError("noise without a covariance")
    weights, left = found
    taps = np.concatenate([np.eye(channels)[None], -_as_taps(weights, channels)])
    return Regression(taps, np.linalg.inv(left.T))


def _as_taps(weights: Complex, channels: int) -> Complex:
    """Row weights (p Nr, Nr) as matrices (p, Nr, Nr) that act on columns."""
    return weights.reshape(-1, channels, channels).transpose(0, 2, 1)


def _apply(regression: Regression, noise: Complex) -> tuple[Complex, Complex]:
    """Q d (K, Nr) and the diagonal blocks of Q (K, Nr, Nr) of one regression."""
    taps, precision = regression.taps, regression.precision
    order, periods = taps.shape[0] - 1, noise.shape[0]
    white = sum(noise[order - m : periods - m] @ taps[m].T for m in range(order + 1))
    weighted = np.asarray(white) @ precision.T
    out = np.zeros_like(noise)
    blocks = np.zeros((periods, *precision.shape), np.complex128)
    for m in range(order + 1):
        back = taps[m].conj().T
        out[order - m : periods - m] += weighted @ back.T
        blocks[order - m : periods - m] += back @ precision @ taps[m]
    return out, blocks


def interpolated(noise: Complex) -> tuple[Complex, Regression]:
    """What each period's noise is beyond what all others tell of it, (K, Nr): C_k (Q d)_k.

    Args:
        noise: complex128 (K, Nr); d, one vector a symbol period, none missing.

    Returns:
        That, and the forward regression.
    """
    forward, backward = fit_regression(noise), fit_regression(noise[::-1])
    one, one_blocks = _apply(forward, noise)
    other, other_blocks = _apply(backward, noise[::-1])
    score, blocks = one + other[::-1], one_blocks + other_blocks[::-1]
    left = np.linalg.solve(blocks, score[..., None])[..., 0]
    return np.asarray(left, np.complex128), forward
