"""Kernels of the refit: expectations over the codewords' posterior, and what follows from them."""

from __future__ import annotations

import numpy as np

from spatiq.kernels import C64, C128, F32, F64, I32, I64, kernel
from spatiq.receiver.matched_filter import sample_periods
from spatiq.receiver.soft_kernels import (
    VECTORS,
    block_metrics,
    block_posterior,
    block_scratch,
    floored_noise,
    predict,
    received_codebook,
    smooth,
    update,
)
from spatiq.receiver.timing_kernels import refit_timing, timing_density
from spatiq.receiver.tracking_kernels import BLOCK


@kernel
def rotate_active(values: F32, phase: F32) -> None:
    """Multiply values float32 (Ka, 2, Nr) in place by exp(-j phase[i])."""
    for i in range(phase.size):
        c, s = np.cos(phase[i]), np.sin(phase[i])
        for r in range(values.shape[2]):
            re, im = values[i, 0, r], values[i, 1, r]
            values[i, 0, r] = re * c + im * s
            values[i, 1, r] = im * c - re * s


@kernel
def gram(words: tuple[I64, I64, C64], energy: F64, known: C128, sxx: C128) -> None:
    """Sum of E[x x^H]: of the known vectors, and of each codeword times its expected energy."""
    pointer, antenna, value = words
    for a in range(known.shape[0]):
        for b in range(known.shape[1]):
            sxx[a, b] = known[a, b]
    for c in range(energy.size):
        if energy[c] == 0.0:
            continue
        for j in range(pointer[c], pointer[c + 1]):
            for m in range(pointer[c], pointer[c + 1]):
                sxx[antenna[m], antenna[j]] += energy[c] * np.conj(value[j]) * value[m]


@kernel
def expectation(
    y: F32,
    active_word: I64,
    amplitude: F32,
    words: tuple[I64, I64, C64],
    codebook: tuple[F32, F32, F32],
    noise: float,
    mean: C64,
    energy: F64,
) -> float:
    """One pass over all active periods of a frame.

    Args:
        y: float32 (Ka, 2, Nr); received vectors, carrier phase removed.
        active_word, amplitude: (Ka,); payload word index or -1; amplitude of payload words.
        words: codeword vectors: pointer, antenna, value.
        codebook: received codebook: real, imag (Nr, C), power (C,).
        noise: N0.
        mean: complex64 (Ka, Nt); E[x] is added at the payload periods, which hold zero.
        energy: float64 (C,); filled with each codeword's expected number of uses, times amplitude
            squared.

    Returns:
        Sum over payload periods of E||y - H x||^2.
    """
    g_real, g_imag, g_power = codebook
    channels, size = g_real.shape
    scratch = block_scratch(size, VECTORS)
    metric, best, second, nearest, inverse_noise, index, weight, used = scratch
    z_real = np.zeros((channels, VECTORS), np.float32)
    z_imag = np.zeros((channels, VECTORS), np.float32)
    energy[:] = 0.0
    total = 0.0
    for first in range(0, active_word.size, VECTORS):
        block = min(VECTORS, active_word.size - first)
        for k in range(block):
            scale = np.float32(1.0) / amplitude[first + k]
            inverse_noise[k] = amplitude[first + k] * amplitude[first + k] / noise
            for r in range(channels):
                z_real[r, k] = y[first + k, 0, r] * scale
                z_imag[r, k] = y[first + k, 1, r] * scale
        block_metrics(g_real, g_imag, g_power, z_real, z_imag, block, metric, best, second, nearest)
        block_posterior(metric, best, second, nearest, inverse_noise, block, index, weight, used)
        total += enter_block(
            first, block, active_word, amplitude, words, (z_real, z_imag), scratch, mean, energy
        )
    return total


@kernel
def enter_block(
    first: int,
    count: int,
    active_word: I64,
    amplitude: F32,
    words: tuple[I64, I64, C64],
    z: tuple[F32, F32],
    scratch: tuple[F32, F32, F32, I32, F32, I64, F32, I64],
    mean: C64,
    energy: F64,
) -> float:
    """Enter a block's posteriors into mean and energy; returns its share of E||y - H x||^2."""
    pointer, antenna, value = words
    metric, _, _, _, _, index, weight, used = scratch
    z_real, z_imag = z
    total = 0.0
    for k in range(count):
        i = first + k
        if active_word[i] < 0:
            continue
        power = np.float32(0.0)
        for r in range(z_real.shape[0]):
            power += z_real[r, k] * z_real[r, k] + z_imag[r, k] * z_imag[r, k]
        square = amplitude[i] * amplitude[i]
        for n in range(used[k]):
            c, w = index[k, n], weight[k, n]
            total += w * max(metric[c, k] + power, np.float32(0.0)) * square
            energy[c] += w * square
            for j in range(pointer[c], pointer[c + 1]):
                mean[i, antenna[j]] += w * amplitude[i] * value[j]
    return total


@kernel
def references(channel: C128, mean: C64, reference: F32) -> None:
    """H E[x] of all active periods into reference float32 (Ka, 2, Nr)."""
    for i in range(mean.shape[0]):
        for r in range(channel.shape[0]):
            v = 0j
            for a in range(mean.shape[1]):
                v += channel[r, a] * mean[i, a]
            reference[i, 0, r] = v.real
            reference[i, 1, r] = v.imag


@kernel
def known_error(y: F32, reference: F32, active_word: I64) -> float:
    """Sum over known periods of ||y - H x||^2."""
    total = 0.0
    for i in range(active_word.size):
        if active_word[i] < 0:
            for r in range(y.shape[2]):
                total += (y[i, 0, r] - reference[i, 0, r]) ** 2
                total += (y[i, 1, r] - reference[i, 1, r]) ** 2
    return total


@kernel
def cross_moments(y: F32, mean: C64, syx: C128) -> None:
    """Sum over active periods of y E[x]^H into syx complex128 (Nr, Nt)."""
    syx[:] = 0.0
    for i in range(mean.shape[0]):
        for r in range(y.shape[2]):
            v = complex(y[i, 0, r], y[i, 1, r])
            for a in range(mean.shape[1]):
                syx[r, a] += v * np.conj(mean[i, a])


@kernel
def solve_moments(sxx: C128, syx: C128, channel: C128) -> None:
    """H = S_yx S_xx^-1 into channel (Nr, Nt), by elimination with pivots from the diagonal.

    S_xx is Hermitian and not negative, so that its largest remaining diagonal entry is a fair
    pivot. Antennas that nothing tells from those before them stay at zero. Overwrites sxx and syx.
    """
    antennas, channels = sxx.shape[0], syx.shape[0]
    done = np.zeros(antennas, np.bool_)
    channel[:] = 0.0
    least = 0.0
    for a in range(antennas):
        least = max(least, 1e-10 * sxx[a, a].real)
    for _ in range(antennas):
        p = -1
        for a in range(antennas):
            if not done[a] and (p < 0 or sxx[a, a].real > sxx[p, p].real):
                p = a
        if sxx[p, p].real <= least:
            break
        done[p] = True
        for a in range(antennas):
            if a != p and sxx[p, a] != 0.0:
                factor = sxx[p, a] / sxx[p, p]
                for b in range(antennas):
                    sxx[b, a] -= sxx[b, p] * factor
                for r in range(channels):
                    syx[r, a] -= syx[r, p] * factor
    for a in range(antennas):
        if done[a]:
            for r in range(channels):
                channel[r, a] = syx[r, a] / sxx[a, a]


@kernel
def refit_phase(
    y: F32, reference: F32, active: I64, noise: float, priors: F64, phase: F32
) -> float:
    """Smooth the phase left between y and reference; added to `phase` (Ka,).

    Blocks of `BLOCK` active periods, two-state Kalman filter and Rauch-Tung-Striebel smoother.
    Returns the variance of the carrier estimate, (radians per period)^2.
    """
    n = active.size
    blocks = (n + BLOCK - 1) // BLOCK
    position = np.empty(blocks)
    filtered, filtered_cov = np.empty((blocks, 2)), np.empty((blocks, 3))
    state, cov = np.zeros(2), np.array([priors[0], 0.0, priors[1]])
    walk = priors[2]
    at = float(active[0])
    gain = 2.0 / noise
    for b in range(blocks):
        begin, end = b * BLOCK, min(n, (b + 1) * BLOCK)
        here = float(active[begin])
        predict(state, cov, here - at, walk)
        at = here
        score, score_k, w, wk, wkk = 0.0, 0.0, 0.0, 0.0, 0.0
        for i in range(begin, end):
            k = active[i] - here
            error, energy = np.float32(0.0), np.float32(0.0)
            for r in range(y.shape[2]):
                error += reference[i, 0, r] * y[i, 1, r] - reference[i, 1, r] * y[i, 0, r]
                energy += reference[i, 0, r] ** 2 + reference[i, 1, r] ** 2
            left = error - energy * (state[0] + state[1] * k)
            score += float(left)
            score_k += float(left * k)
            w += float(energy)
            wk += float(energy * k)
            wkk += float(energy * k * k)
        update(state, cov, gain * score, gain * score_k, gain * w, gain * wk, gain * wkk)
        position[b] = here
        filtered[b, 0], filtered[b, 1] = state[0], state[1]
        for j in range(3):
            filtered_cov[b, j] = cov[j]
    smoothed = np.empty((blocks, 2))
    smooth(blocks, position, filtered, filtered_cov, walk, smoothed)
    for b in range(blocks):
        for i in range(b * BLOCK, min(n, (b + 1) * BLOCK)):
            phase[i] += smoothed[b, 0] + smoothed[b, 1] * (active[i] - position[b])
    return float(filtered_cov[blocks - 1, 2])


@kernel
def residual_covariance(
    y: F32,
    mean: C64,
    active_word: I64,
    words: tuple[I64, I64, C64],
    energy: F64,
    channel: C128,
    noise: float,
    covariance: C128,
) -> float:
    """Expected covariance of y - H x over the channels into (Nr, Nr), scaled to a trace of Nr N0.

    E[(y - H x)(y - H x)^H] is what E[x] leaves, and H cov(x) H^H of the doubtful words: without the
    second, doubt would look like noise that follows the channel's directions.

    Returns:
        Energy in doubt: the trace of the second.
    """
    channels, antennas = channel.shape
    spread = np.zeros((antennas, antennas), np.complex128)
    gram(words, energy, np.zeros((antennas, antennas), np.complex128), spread)
    covariance[:] = 0.0
    error = np.empty(channels, np.complex128)
    for i in range(y.shape[0]):
        for r in range(channels):
            v = complex(y[i, 0, r], y[i, 1, r])
            for a in range(antennas):
                v -= channel[r, a] * mean[i, a]
            error[r] = v
        for r in range(channels):
            for q in range(channels):
                covariance[r, q] += error[r] * np.conj(error[q])
        if active_word[i] >= 0:
            for a in range(antennas):
                if mean[i, a] != 0.0:  # mostly one antenna at a time is likely at all
                    for b in range(antennas):
                        spread[a, b] -= mean[i, a] * np.conj(mean[i, b])
    trace, certain = 0.0, 0.0
    for r in range(channels):
        certain += covariance[r, r].real
        for q in range(channels):
            for a in range(antennas):
                for b in range(antennas):
                    covariance[r, q] += channel[r, a] * spread[a, b] * np.conj(channel[q, b])
        trace += covariance[r, r].real
    scale = channels * noise / trace if trace > 0.0 else 0.0
    for r in range(channels):
        for q in range(channels):
            covariance[r, q] *= scale
    return trace - certain


@kernel
def take_symbols(y: F32, payload: I64, amplitude: F32, symbols: C64) -> None:
    """y (Ka, 2, Nr) of the payload's active periods, over their amplitude, into (Kp, Nr)."""
    for k in range(payload.size):
        i = payload[k]
        for r in range(y.shape[2]):
            symbols[k, r] = complex(y[i, 0, r], y[i, 1, r]) / amplitude[i]


@kernel
def refit_round(
    planes: F32,
    timing: F64,
    phase: F32,
    channel: C128,
    noise: float,
    sent: tuple[I64, I64, F32, C64, C128],
    words: tuple[I64, I64, C64],
    bank: tuple[F32, F32, int, F64],
    priors: F64,
    with_timing: bool,
    room: tuple[F32, F32, F32, F32, C64, F64, F64],
    antenna_energy: F64,
) -> tuple[float, float]:
    """One round: expectation, then carrier phase, timing and channel in turn, given the others.

    Args:
        planes: float32 (Nr, 2, W); samples.
        timing: (4,); t0, step and their variances, in and out.
        phase: float32 (Ka,); in and out.
        channel: complex128 (Nr, Nt); in and out.
        noise: N0 so far.
        sent: active periods, payload words, amplitudes, known vectors, their Gram matrix.
        words: codeword vectors: pointer, antenna, value.
        bank: taps, slopes, phases, curvature.
        priors: (4,); variances of phase and carrier left, of the phase's walk per period, of step.
        with_timing: whether timing is refitted.
        room: y, reference, slope (Ka, 2, Nr), shift (Ka,), mean (Ka, Nt), energy (C,), density
            (Ka,).
        antenna_energy: (Nt,); filled with the energy behind each channel column.

    Returns:
        N0 and the variance of the carrier. y is left with the new phase removed.
    """
    active, active_word, amplitude, known, known_gram = sent
    taps, slopes, phases, curvature = bank
    y, reference, slope, shift, mean, energy, density = room
    channels, antennas = channel.shape
    size = energy.size
    codebook = (
        np.empty((channels, size), np.float32),
        np.empty((channels, size), np.float32),
        np.empty(size, np.float32),
    )
    received_codebook(channel, words[0], words[1], words[2], codebook[0], codebook[1], codebook[2])
    noise = floored_noise(noise, codebook[2])
    sample_periods(planes, timing[0], timing[1], active, taps, phases, y)
    rotate_active(y, phase)
    for i in range(active.size):
        shift[i] = phase[i]
        for a in range(antennas):
            mean[i, a] = known[i, a]
    error = expectation(y, active_word, amplitude, words, codebook, noise, mean, energy)
    references(channel, mean, reference)
    error += known_error(y, reference, active_word)
    frequency_var = refit_phase(y, reference, active, noise, priors, phase)
    if with_timing:
        sample_periods(planes, timing[0], timing[1], active, slopes, phases, slope)
        rotate_active(slope, shift)
        timing_density(reference, active, curvature, density)
        refit_timing(slope, reference, density, active, noise, priors[3], timing)
    for i in range(active.size):
        shift[i] = phase[i] - shift[i]
    rotate_active(y, shift)
    sxx = np.empty((antennas, antennas), np.complex128)
    syx = np.empty((channels, antennas), np.complex128)
    gram(words, energy, known_gram, sxx)
    used = 0
    for a in range(antennas):
        antenna_energy[a] = sxx[a, a].real
        used += sxx[a, a].real > 0.0
    cross_moments(y, mean, syx)
    solve_moments(sxx, syx, channel)
    freedom = max(channels * (active.size - used) - 2, 1)
    return error / freedom, frequency_var
