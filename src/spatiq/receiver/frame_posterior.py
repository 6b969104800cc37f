"""Posterior of the codewords of one frame whose channel and phase change from block to block.

Plain NumPy: only frames that show motion come here, and compiling would cost more than it saves.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spatiq.receiver.channel_smoothing import Complex, Moments
from spatiq.receiver.link_tables import LinkTables

_AT_ONCE = 1 << 19  # received codeword entries worked on at a time


@dataclass(frozen=True, eq=False)
class FrameBlocks:
    """How a frame's active periods fall into blocks of a length.

    Attributes:
        length: symbol periods of a block.
        count: B.
        block: int64 (Ka,); block of each active period, ascending.
        known: products conj(x_a) x_b of known vectors: period's index, a, b, value.
    """

    length: int
    count: int
    block: NDArray[np.int64]
    known: tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.int64], Complex]


def frame_blocks(tables: LinkTables, length: int) -> FrameBlocks:
    """Blocks from the first active period to the last."""
    block = (tables.active - tables.active[0]) // length
    count = int(block[-1]) + 1
    vectors = tables.active_vectors
    parts: list[list[NDArray[Any]]] = [[], [], [], []]
    for i in range(tables.active.size):
        span = slice(vectors.pointer[i], vectors.pointer[i + 1])
        antenna, value = vectors.antenna[span], vectors.value[span].astype(np.complex128)
        n = antenna.size
        if n:
            parts[0].append(np.full(n * n, i))
            parts[1].append(np.repeat(antenna, n))
            parts[2].append(np.tile(antenna, n))
            parts[3].append(np.outer(value.conj(), value).ravel())
    joined = [np.concatenate(p) for p in parts]
    return FrameBlocks(length, count, block, (joined[0], joined[1], joined[2], joined[3]))


@dataclass(frozen=True, eq=False)
class Posterior:
    """What is expected of the words sent in n active periods, which lie in blocks first..first+b-1.

    Attributes:
        mean: complex128 (n, Nt); E[x].
        gram: complex128 (b, Nt, Nt); sums of E[conj(x_a) x_b] over the blocks.
    """

    mean: Complex
    gram: Complex


def posterior(
    y: Complex,
    periods: NDArray[np.int64],
    blocks: FrameBlocks,
    channels: Complex,
    noise: float,
    tables: LinkTables,
    variance: NDArray[np.float64] | None = None,
) -> Posterior:
    """E[x] and E[conj(x) x^T] of some active periods; known vectors where they are known.

    Args:
        y: (n, Nr); their received vectors, carrier phase removed.
        periods: (n,); indices of active periods, ascending.
        blocks: of the channels.
        channels: (b, Nr, Nt); from the first period's block to the last one's.
        noise: N0.
        tables: link tables.
        variance: (Nt,); of the error of each coefficient of `channels`, which makes words less sure
            (as in `soft_output`); None: none.
    """
    vectors = tables.codebook.vectors
    size, antennas = vectors.shape
    low = int(blocks.block[periods[0]])
    mean = tables.known_vectors[periods].astype(np.complex128)
    gram = _known_gram(periods, blocks, low, len(channels), antennas)
    sent = np.flatnonzero(tables.active_word[periods] >= 0)
    excess = None if variance is None else np.abs(vectors) ** 2 @ variance
    pairs = (vectors.conj()[:, :, None] * vectors[:, None, :]).reshape(size, antennas * antennas)
    step = max(1, _AT_ONCE // (size * y.shape[1]))
    for first in range(0, sent.size, step):
        chosen = sent[first : first + step]
        at = periods[chosen]
        block = blocks.block[at] - low
        begin, end = int(block[0]), int(block[-1]) + 1
        received = (channels[begin:end] @ vectors.T).astype(np.complex64)
        amplitude = tables.active_amplitude[at].astype(np.float64)
        z = (y[chosen] / amplitude[:, None]).astype(np.complex64)
        weight = _weights(z, received, block - begin, noise / amplitude**2, excess)
        mean[chosen] = amplitude[:, None] * (weight @ vectors)
        starts = np.flatnonzero(np.diff(block, prepend=-1))
        uses = np.add.reduceat(weight * amplitude[:, None] ** 2, starts, axis=0)
        gram[block[starts]] += (uses @ pairs).reshape(-1, antennas, antennas)
    return Posterior(mean, gram)


def _known_gram(
    periods: NDArray[np.int64], blocks: FrameBlocks, low: int, count: int, antennas: int
) -> Complex:
    """Sums of conj(x_a) x_b of the known vectors among some periods, (count, Nt, Nt)."""
    gram = np.zeros((count, antennas, antennas), np.complex128)
    index, one, other, product = blocks.known
    part = slice(*np.searchsorted(index, [periods[0], periods[-1] + 1]))
    index, one, other, product = index[part], one[part], other[part], product[part]
    if index.size and periods[-1] - periods[0] + 1 != periods.size:
        inside = np.isin(index, periods)
        index, one, other, product = index[inside], one[inside], other[inside], product[inside]
    np.add.at(gram, (blocks.block[index] - low, one, other), product)
    return gram


def _weights(
    z: NDArray[np.complex64],
    received: NDArray[np.complex64],
    block: NDArray[np.int64],
    noise: NDArray[np.float64],
    excess: NDArray[np.float64] | None,
) -> NDArray[np.float64]:
    """Probability of each word, (n, C), given z (n, Nr) and received words (B, Nr, C)."""
    distance = np.zeros((len(z), received.shape[2]), np.float32)
    for r in range(z.shape[1]):
        error = z[:, r, None] - received[block, r]
        distance += error.real**2 + error.imag**2
    if excess is None:
        distance -= distance.min(axis=1, keepdims=True)
        weight = np.exp(-distance.astype(np.float64) / noise[:, None])
    else:
        total = noise[:, None] + excess
        exponent = distance / total + z.shape[1] * np.log(total)
        weight = np.exp(exponent.min(axis=1, keepdims=True) - exponent)
    return np.asarray(weight / weight.sum(axis=1, keepdims=True), np.float64)


def moments(
    y: Complex, known: Posterior, periods: NDArray[np.int64], blocks: FrameBlocks
) -> Moments:
    """Moments of some active periods, y (n, Nr), over the blocks that the posterior covers."""
    channels, antennas = y.shape[1], known.mean.shape[1]
    cross = np.zeros((len(known.gram), channels, antennas), np.complex128)
    block = blocks.block[periods] - blocks.block[periods[0]]
    starts = np.flatnonzero(np.diff(block, prepend=-1))
    conjugate = known.mean.conj()
    for r in range(channels):
        cross[block[starts], r] = np.add.reduceat(y[:, r, None] * conjugate, starts, axis=0)
    return Moments(known.gram, cross, float(np.sum(np.abs(y) ** 2)), periods.size)
