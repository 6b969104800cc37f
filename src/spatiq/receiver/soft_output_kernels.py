"""Kernels of the soft-decision output: bare arrays in and out."""

from __future__ import annotations

import numpy as np

from spatiq.kernels import C64, F32, F64, U8, kernel
from spatiq.receiver.soft_kernels import VECTORS, block_metrics, floored_noise

# exp of what lies further below the best word may leave the range of double precision.
FAR = -600.0
# exp(-40) of a sum's largest term is less than double precision resolves.
NOTHING = -40.0


@kernel
def likelihood_ratios(
    y: C64,
    received: tuple[F32, F32, F32],
    noise: float,
    amplitude: F64,
    excess: F64,
    labels: U8,
    exact: bool,
    llr: F32,
) -> None:
    """ln P(bit = 0 | y) / P(bit = 1 | y) of every bit of every payload period of a frame.

    Args:
        y: complex64 (K, Nr); received payload vectors over their amplitude.
        received: real, imag float32 (Nr, C) and power float32 (C,) of the received codebook.
        noise: N0 before the division by the amplitude.
        amplitude: float64 (K,).
        excess: float64 (C,); variance that the channel's error adds to each word.
        labels: uint8 (C, b); bits of each word.
        exact: sums over the words; largest terms only when False.
        llr: float32 (K * b,); filled, periods in order, first bit of a word first.
    """
    real, imag, power = received
    size, bits = labels.shape
    channels = y.shape[1]
    metric = np.empty((size, VECTORS), np.float32)
    best, second = np.empty(VECTORS, np.float32), np.empty(VECTORS, np.float32)
    nearest = np.empty(VECTORS, np.int32)
    z_real = np.empty((channels, VECTORS), np.float32)
    z_imag = np.empty((channels, VECTORS), np.float32)
    energy = np.empty(VECTORS)
    likelihood = np.empty((size, VECTORS))
    top = np.empty((bits, 2, VECTORS))
    first = 0
    while first < y.shape[0]:
        count = _run(amplitude, first)
        for k in range(count):
            energy[k] = 0.0
            for r in range(channels):
                v = y[first + k, r]
                z_real[r, k], z_imag[r, k] = v.real, v.imag
                energy[k] += float(v.real) * float(v.real) + float(v.imag) * float(v.imag)
        block_metrics(real, imag, power, z_real, z_imag, count, metric, best, second, nearest)
        scaled = floored_noise(noise / (amplitude[first] * amplitude[first]), power)
        log_likelihoods(metric, energy, scaled, excess, channels, count, likelihood)
        group_maxima(likelihood, labels, count, top)
        if exact:
            group_sums(likelihood, labels, count, top)
        for k in range(count):
            for j in range(bits):
                llr[(first + k) * bits + j] = top[j, 0, k] - top[j, 1, k]
        first += count


@kernel
def _run(amplitude: F64, first: int) -> int:
    """Periods from `first` on that have one amplitude; no more than a block."""
    count = 1
    limit = min(VECTORS, amplitude.size - first)
    while count < limit and amplitude[first + count] == amplitude[first]:
        count += 1
    return count


@kernel
def log_likelihoods(
    metric: F32,
    energy: F64,
    noise: float,
    excess: F64,
    channels: int,
    count: int,
    likelihood: F64,
) -> None:
    """ln of the density of y given each word, up to a constant of the period.

    Args:
        metric: float32 (C, B); of `block_metrics`.
        energy: float64 (B,); ||y||^2.
        noise: variance of the noise in y; `excess` (C,) comes on top.
        channels: Nr.
        count: vectors in the block.
        likelihood: float64 (C, B); filled.
    """
    for c in range(excess.size):
        variance = noise + excess[c]
        inverse = 1.0 / variance
        # Words of more power come with more variance: the density's own norm tells them apart.
        norm = channels * np.log(variance)
        row, distance = likelihood[c, :count], metric[c, :count]
        square = energy[:count]
        for k in range(count):
            row[k] = -(square[k] + distance[k]) * inverse - norm


@kernel
def group_maxima(likelihood: F64, labels: U8, count: int, top: F64) -> None:
    """Largest entry among the words whose bit j is v, into top[j, v] (b, 2, B)."""
    for j in range(labels.shape[1]):
        for v in range(2):
            row = top[j, v, :count]
            for k in range(count):
                row[k] = -np.inf
    for c in range(labels.shape[0]):
        given = likelihood[c, :count]
        for j in range(labels.shape[1]):
            row = top[j, labels[c, j], :count]
            for k in range(count):
                row[k] = given[k] if given[k] > row[k] else row[k]


@kernel
def group_sums(likelihood: F64, labels: U8, count: int, top: F64) -> None:
    """ln of the sum of exp over the words whose bit j is v, in the place of top[j, v].

    One exp for each word serves all bits. A group that lies too far below the best word for that
    is summed about its own largest term.
    """
    size, bits = labels.shape
    total = np.zeros((bits, 2, count))
    weight = np.empty(count)
    peak = np.maximum(top[0, 0, :count], top[0, 1, :count])
    for c in range(size):
        given = likelihood[c, :count]
        for k in range(count):
            weight[k] = np.exp(given[k] - peak[k])
        for j in range(bits):
            row = total[j, labels[c, j]]
            for k in range(count):
                row[k] += weight[k]
    for j in range(bits):
        for v in range(2):
            for k in range(count):
                if top[j, v, k] - peak[k] > FAR:
                    top[j, v, k] = peak[k] + np.log(total[j, v, k])
                else:
                    top[j, v, k] += _far_sum(likelihood, labels, j, v, k, top[j, v, k])


@kernel
def _far_sum(likelihood: F64, labels: U8, j: int, v: int, k: int, largest: float) -> float:
    """ln of the sum over a group of exp(entry - largest)."""
    total = 0.0
    for c in range(labels.shape[0]):
        below = likelihood[c, k] - largest
        if labels[c, j] == v and below > NOTHING:
            total += np.exp(below)
    return float(np.log(total))
