"""Kernels of the refit: expectations over the codewords' posterior, and what follows from them."""

from __future__ import annotations

import numpy as np

from spatiq.kernels import C64, C128, F32, F64, I32, I64, kernel
from spatiq.receiver.soft_kernels import (
    VECTORS,
    block_metrics,
    block_posterior,
    block_scratch,
    predict,
    smooth,
    update,
)
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
def solve_diagonal(sxx: C128, syx: C128, channel: C128) -> bool:
    """H = S_yx S_xx^-1 when S_xx is diagonal, antennas without energy at zero; False when not."""
    antennas = sxx.shape[0]
    for a in range(antennas):
        for b in range(antennas):
            if a != b and abs(sxx[a, b]) > 1e-9 * (abs(sxx[a, a]) + abs(sxx[b, b])):
                return False
    for a in range(antennas):
        for r in range(channel.shape[0]):
            channel[r, a] = syx[r, a] / sxx[a, a].real if sxx[a, a].real > 0.0 else 0.0
    return True


@kernel
def refit_phase(
    y: F32, reference: F32, active: I64, noise: float, prior: F64, walk: float, phase: F32
) -> float:
    """Smooth the phase left between y and reference; added to `phase` (Ka,).

    Blocks of `BLOCK` active periods, two-state Kalman filter and Rauch-Tung-Striebel smoother.
    Returns the variance of the carrier estimate, (radians per period)^2.
    """
    n = active.size
    blocks = (n + BLOCK - 1) // BLOCK
    position = np.empty(blocks)
    filtered, filtered_cov = np.empty((blocks, 2)), np.empty((blocks, 3))
    state, cov = np.zeros(2), np.array([prior[0], 0.0, prior[1]])
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
def timing_density(reference: F32, active: I64, curvature: F64, density: F64) -> None:
    """Information about timing that each period brings, times N0/2, per sample squared.

    The curvature of the likelihood of a waveform whose symbols are all known. Where neighbouring
    symbols are alike (one antenna sending the same symbol twice) there is little slope to tell
    timing by; symbols of random phase average to the modified bound's slope energy.

    Args:
        reference: float32 (Ka, 2, Nr); H E[x].
        active: (Ka,); periods, ascending.
        curvature: (M+1,); of the filter bank.
        density: (Ka,); filled; single values may be negative, their sum is not.
    """
    for i in range(active.size):
        total = 0.0
        for m in range(-(curvature.size - 1), curvature.size):
            j = i + m
            if j < 0 or j >= active.size or active[j] - active[i] != m:
                continue
            product = np.float32(0.0)
            for r in range(reference.shape[2]):
                product += reference[i, 0, r] * reference[j, 0, r]
                product += reference[i, 1, r] * reference[j, 1, r]
            total += curvature[abs(m)] * product
        density[i] = total


@kernel
def refit_timing(
    slope: F32,
    reference: F32,
    density: F64,
    active: I64,
    noise: float,
    step_var: float,
    out: F64,
) -> None:
    """Newton step for t0 and step, with a prior on step.

    out (4,): corrections of t0 and step, their variances. All pulses are known to lie between known
    neighbours, so that the score holds no intersymbol term (it is antisymmetric and cancels).
    """
    score, score_k, w, wk, wkk = 0.0, 0.0, 0.0, 0.0, 0.0
    for i in range(active.size):
        k = float(active[i])
        error = np.float32(0.0)
        for r in range(slope.shape[2]):
            error += reference[i, 0, r] * slope[i, 0, r] + reference[i, 1, r] * slope[i, 1, r]
        score += float(error)
        score_k += float(error * k)
        w += density[i]
        wk += density[i] * k
        wkk += density[i] * k * k
    gain = 2.0 / noise
    j11, j12 = gain * w, gain * wk
    j22 = gain * wkk + (1.0 / step_var if step_var > 0.0 else 1e30)
    det = j11 * j22 - j12 * j12
    out[:] = 0.0
    if j11 > 0.0 and det > 0.0:
        out[0] = gain * (j22 * score - j12 * score_k) / det
        out[1] = gain * (j11 * score_k - j12 * score) / det
        out[2] = j22 / det
        out[3] = j11 / det
