"""Kernels of the first look at the payload: decision-directed carrier phase and timing."""

from __future__ import annotations

import numpy as np

from spatiq.kernels import C64, C128, F32, F64, I32, I64, inlined, kernel
from spatiq.receiver.matched_filter import filter_at
from spatiq.receiver.soft_kernels import (
    block_metrics,
    block_posterior,
    block_scratch,
    predict,
    smooth,
    update,
)

BLOCK = 16  # symbol periods between updates of the track


@kernel
def derotated_block(
    planes: F32,
    instants: F64,
    angles: F32,
    scales: F32,
    table: F32,
    phases: int,
    real: F32,
    imag: F32,
) -> None:
    """Filter outputs at `instants` (n,), turned by -angles and scaled, into real, imag (Nr, B)."""
    channels = planes.shape[0]
    y = np.empty((1, 2, channels), np.float32)
    for k in range(instants.size):
        filter_at(planes, instants[k], table, phases, y, 0)
        c = np.cos(angles[k]) * scales[k]
        s = np.sin(angles[k]) * scales[k]
        for r in range(channels):
            real[r, k] = y[0, 0, r] * c + y[0, 1, r] * s
            imag[r, k] = y[0, 1, r] * c - y[0, 0, r] * s


@kernel
def block_references(
    periods: I64,
    active_word: I64,
    vectors: tuple[I64, I64, C64],
    channel: C128,
    codebook: tuple[F32, F32, F32],
    z: tuple[F32, F32],
    scales: F32,
    noise: float,
    scratch: tuple[F32, F32, F32, I32, F32, I64, F32, I64],
    means: tuple[F32, F32],
) -> None:
    """Posterior mean of H x for a block, the known one where it is known, into means (Nr, B).

    Args:
        periods: (n,); indices of the active periods.
        z: received vectors (Nr, B), real and imaginary.
        scales: (n,); 1 / amplitude, with which z was scaled.
        scratch: of `block_scratch`.
    """
    g_real, g_imag, g_power = codebook
    metric, best, second, nearest, inverse_noise, index, weight, used = scratch
    pointer, antenna, value = vectors
    mean_real, mean_imag = means
    count = periods.size
    for k in range(count):
        inverse_noise[k] = 1.0 / (noise * scales[k] * scales[k])
    block_metrics(g_real, g_imag, g_power, z[0], z[1], count, metric, best, second, nearest)
    block_posterior(metric, best, second, nearest, inverse_noise, count, index, weight, used)
    for k in range(count):
        i = periods[k]
        for r in range(g_real.shape[0]):
            a, b = 0.0, 0.0
            if active_word[i] >= 0:
                for n in range(used[k]):
                    a += weight[k, n] * g_real[r, index[k, n]]
                    b += weight[k, n] * g_imag[r, index[k, n]]
            else:
                for j in range(pointer[i], pointer[i + 1]):
                    v = channel[r, antenna[j]] * value[j]
                    a += v.real
                    b += v.imag
            mean_real[r, k] = a
            mean_imag[r, k] = b


@kernel
def block_score(
    observed: tuple[F32, F32],
    means: tuple[F32, F32],
    offsets: F64,
    scales: F32,
    quadrature: bool,
    sums: F64,
) -> None:
    """Sums over a block of errors and weights, and of them times the offset.

    The error of a period is the part of `observed` along j*mean (quadrature) or along mean; its
    weight is |mean|^2; both in units of the symbol as sent. sums (5,): error, error k, weight,
    weight k, weight k^2.
    """
    sums[:] = 0.0
    for k in range(offsets.size):
        error, energy = np.float32(0.0), np.float32(0.0)
        for r in range(means[0].shape[0]):
            a, b = means[0][r, k], means[1][r, k]
            if quadrature:
                error += a * observed[1][r, k] - b * observed[0][r, k]
            else:
                error += a * observed[0][r, k] + b * observed[1][r, k]
            energy += a * a + b * b
        square = 1.0 / (scales[k] * scales[k])
        sums[0] += error * square
        sums[1] += error * square * offsets[k]
        sums[2] += energy * square
        sums[3] += energy * square * offsets[k]
        sums[4] += energy * square * offsets[k] * offsets[k]


@inlined
def update_timing(
    state: F64, cov: F64, sums: F64, count: int, noise: float, slope_energy: float, step: float
) -> None:
    """Take a block's timing score into the (timing, step) state.

    Symbols beyond the block's edges are not yet known: their pulses add to the score about
    (weight/n)^2 / step^2, on top of the thermal weight * slope_energy * N0 / 2.
    """
    thermal = sums[2] * slope_energy * noise / 2.0
    edge = (sums[2] / count) ** 2 / (step * step)
    gain = slope_energy * sums[2] / (thermal + edge)
    info = gain * slope_energy
    update(
        state, cov, gain * sums[0], gain * sums[1], info * sums[2], info * sums[3], info * sums[4]
    )


@kernel
def block_vectors(channels: int) -> tuple[F32, F32]:
    """Room for a block's vectors, real and imaginary, (Nr, B) each."""
    return np.empty((channels, BLOCK), np.float32), np.empty((channels, BLOCK), np.float32)


@kernel
def write_phase(position: F64, smoothed: F64, order: I64, active: I64, phase: F32) -> None:
    """Phase of the periods travelled, from the smoothed (phase, carrier) of each block."""
    for b in range(position.size):
        for n in range(b * BLOCK, min(order.size, (b + 1) * BLOCK)):
            i = order[n]
            phase[i] = smoothed[b, 0] + smoothed[b, 1] * (active[i] - position[b])


@kernel
def track_side(
    planes: F32,
    t0: float,
    step: float,
    order: I64,
    sent: tuple[I64, I64, tuple[I64, I64, C64], F32],
    channel: C128,
    codebook: tuple[F32, F32, F32],
    noise: float,
    centroid: float,
    prior: F64,
    walk: float,
    bank: tuple[F32, F32, int, float],
    with_timing: bool,
    phase: F32,
    track: F64,
) -> None:
    """Track from the header outwards over the active periods listed in `order`.

    Args:
        order: indices of active periods, in the order of travel.
        sent: of the active periods: period, payload word or -1, known vectors (pointer, antenna,
            value), amplitude.
        prior: (4,); variances of phase, carrier, timing and step at the header's centroid.
        walk: variance of the phase's random walk per period.
        bank: taps, slopes, phases and slope energy of the filter bank.
        phase: float32 (Ka,); filled at the periods travelled.
        track: (4,); filled with the corrections of t0 and step, and the phase and its slope at the
            header's centroid.
    """
    active, active_word, vectors, amplitude = sent
    taps, slopes, phases, slope_energy = bank
    channels, size = codebook[0].shape
    z, means, scratch = block_vectors(channels), block_vectors(channels), block_scratch(size, BLOCK)
    blocks = (order.size + BLOCK - 1) // BLOCK
    position, sums = np.empty(blocks), np.empty(5)
    room, single = np.empty((2, BLOCK)), np.empty((2, BLOCK), np.float32)
    filtered, filtered_cov = np.empty((blocks, 2)), np.empty((blocks, 3))
    state, cov = np.zeros(2), np.array([prior[0], 0.0, prior[1]])
    t_state, t_cov = np.zeros(2), np.array([prior[2], 0.0, prior[3]])
    at = centroid
    quadrature = blocks >= 0  # a variable: numba compiles anew for each literal True and False
    for b in range(blocks):
        periods = order[b * BLOCK : min(order.size, (b + 1) * BLOCK)]
        here = float(active[periods[0]])
        predict(state, cov, here - at, walk)
        predict(t_state, t_cov, here - at, 0.0)
        at = here
        offsets, instants = room[0, : periods.size], room[1, : periods.size]
        angles, scales = single[0, : periods.size], single[1, : periods.size]
        # Element by element: array expressions take numba seconds to compile.
        for k in range(periods.size):
            offsets[k] = active[periods[k]] - here
            ideal = t0 + active[periods[k]] * step
            instants[k] = ideal + t_state[0] + t_state[1] * offsets[k]
            angles[k] = state[0] + state[1] * offsets[k]
            scales[k] = np.float32(1.0) / amplitude[periods[k]]
        derotated_block(planes, instants, angles, scales, taps, phases, z[0], z[1])
        block_references(
            periods, active_word, vectors, channel, codebook, z, scales, noise, scratch, means
        )
        block_score(z, means, offsets, scales, quadrature, sums)
        g = 2.0 / noise
        update(state, cov, g * sums[0], g * sums[1], g * sums[2], g * sums[3], g * sums[4])
        if with_timing and sums[2] > 0.0:
            derotated_block(planes, instants, angles, scales, slopes, phases, z[0], z[1])
            block_score(z, means, offsets, scales, not quadrature, sums)
            update_timing(t_state, t_cov, sums, periods.size, noise, slope_energy, step)
        position[b] = here
        for j in range(2):
            filtered[b, j] = state[j]
        for j in range(3):
            filtered_cov[b, j] = cov[j]
    smoothed = np.empty((blocks, 2))
    smooth(blocks, position, filtered, filtered_cov, walk, smoothed)
    write_phase(position, smoothed, order, active, phase)
    track[0] = t_state[0] - t_state[1] * at
    track[1] = t_state[1]
    track[2] = smoothed[0, 0] + smoothed[0, 1] * (centroid - position[0])
    track[3] = smoothed[0, 1]
