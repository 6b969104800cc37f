"""Codebooks, channels and a plain link for the tests of predictions."""

from __future__ import annotations

from itertools import pairwise

import numpy as np

from spatiq.signal.codebooks import Codebook, space_shift_keying, spatial_modulation
from spatiq.signal.constellations import named


def sm(antennas: int, constellation: str) -> Codebook:
    """Spatial modulation, natural antenna labels, antenna bits above symbol bits."""
    bits = antennas.bit_length() - 1
    return spatial_modulation(antennas, named(constellation), range(antennas), range(bits))


def ssk(antennas: int) -> Codebook:
    return space_shift_keying(antennas, range(antennas), range(antennas.bit_length() - 1))


def gsm_4_2(constellation: str) -> Codebook:
    """Two of four antennas, sets 01, 02, 03, 12, the same symbol on both over sqrt(2)."""
    sets = ((0, 1), (0, 2), (0, 3), (1, 2))
    points = named(constellation)
    vectors = np.zeros((4 * points.size, 4), complex)
    for i, active in enumerate(sets):
        for label in range(points.size):
            vectors[i * points.size + label, list(active)] = points.points[label] / np.sqrt(2)
    index, label = np.divmod(np.arange(4 * points.size), points.size)
    spatial = np.arange(2 + points.bits) < 2
    return Codebook("generalised", vectors, sets, index, label, spatial, points)


def qsm(antennas: int, constellation: str) -> Codebook:
    """Quadrature form: the first index radiates the real part, the second the imaginary part."""
    points = named(constellation)
    size = antennas**2 * points.size
    vectors = np.zeros((size, antennas), complex)
    index, label = np.divmod(np.arange(size), points.size)
    for word in range(size):
        first, second = divmod(int(index[word]), antennas)
        vectors[word, first] += points.points[label[word]].real
        vectors[word, second] += 1j * points.points[label[word]].imag
    sets = tuple(
        tuple(sorted({first, second})) for first in range(antennas) for second in range(antennas)
    )
    bits = size.bit_length() - 1
    spatial = np.arange(bits) < bits - points.bits
    return Codebook("quadrature", vectors, sets, index, label, spatial, points)


def complex_normal(rng: np.random.Generator, *shape: int) -> np.ndarray:
    return (rng.standard_normal(shape) + 1j * rng.standard_normal(shape)) / np.sqrt(2)


def bit_weights(book: Codebook) -> tuple[np.ndarray, np.ndarray]:
    """Number of spatial and of signal bits set in each word."""
    bits = book.words_to_bits(np.arange(book.size)[:, None])
    return bits[:, book.spatial_bits].sum(1), bits[:, ~book.spatial_bits].sum(1)


def simulate(
    rng: np.random.Generator,
    book: Codebook,
    h: np.ndarray,
    h_used: np.ndarray,
    n0: np.ndarray,
    periods: int,
) -> tuple[np.ndarray, np.ndarray]:
    """Words sent and decided, (F, K): y = H x + n, decision argmin ||y - H_used x||^2."""
    frames, receivers, _ = h.shape
    sent = rng.integers(0, book.size, (frames, periods))
    decided = np.empty_like(sent)
    edges = [*range(0, frames, 200), frames]
    for a, b in pairwise(edges):
        noise = complex_normal(rng, b - a, periods, receivers)
        y = book.vectors[sent[a:b]] @ h[a:b].swapaxes(1, 2)
        y += np.sqrt(n0[a:b])[:, None, None] * noise
        points = book.vectors @ h_used[a:b].swapaxes(1, 2)
        cross = np.einsum("fkr,fcr->fkc", y, points.conj()).real
        metric = np.sum(np.abs(points) ** 2, axis=2)[:, None] - 2 * cross
        decided[a:b] = metric.argmin(axis=2)
    return sent, decided
