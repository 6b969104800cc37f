"""Dispersive channels in plain NumPy: dense matrices, exhaustive search."""

from __future__ import annotations

import itertools

import numpy as np
from numpy.typing import NDArray

from spatiq.receiver.fir_channel import Window


def fading_taps(rng: np.random.Generator, lags: int, receive: int, transmit: int) -> NDArray:
    """complex128 (L, Nr, Nt), unit mean power over all lags."""
    parts = rng.standard_normal((lags, receive, transmit, 2)) * np.sqrt(0.5 / lags)
    return parts[..., 0] + 1j * parts[..., 1]


def dense_matrix(taps: NDArray, window: Window, periods: int, heard: NDArray) -> NDArray:
    """H (K Nr, N Nt) of N = K symbol periods, rows that are not heard left at zero."""
    _, receive, transmit = taps.shape
    out = np.zeros((periods, receive, periods, transmit), complex)
    for k in range(periods):
        for lag, tap in zip(range(window.first, window.last + 1), taps, strict=True):
            if 0 <= k - lag < periods and heard[k]:
                out[k, :, k - lag, :] = tap
    return out.reshape(periods * receive, periods * transmit)


def cost_of(
    received: NDArray, matrix: NDArray, vectors: NDArray, amplitude: NDArray, words: tuple
) -> float:
    """||y - H x||^2."""
    sent = vectors[list(words)] * amplitude[:, None]
    return float(np.sum(np.abs(received.ravel() - matrix @ sent.ravel()) ** 2))


def exhaustive_search(
    received: NDArray,
    taps: NDArray,
    window: Window,
    vectors: NDArray,
    amplitude: NDArray,
    heard: NDArray,
) -> tuple[NDArray, float]:
    """Best words of all C^N sequences (periods without a word: -1), and their cost."""
    matrix = dense_matrix(taps, window, amplitude.size, heard)
    received = np.where(heard[:, None], received, 0)
    choices = [range(len(vectors)) if a else (0,) for a in amplitude]
    costs = {
        words: cost_of(received, matrix, vectors, amplitude, words)
        for words in itertools.product(*choices)
    }
    best = min(costs, key=lambda words: costs[words])
    return np.where(amplitude != 0, best, -1), costs[best]
