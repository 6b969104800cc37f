"""Kernel of the first look at the payload: decision-directed tracking of carrier phase and timing."""

from __future__ import annotations

import numpy as np

from spatiq.kernels import C64, C128, F32, F64, I64, kernel
from spatiq.receiver.matched_filter import filter_at
from spatiq.receiver.soft_kernels import codeword_metrics, posterior, predict, smooth, update

BLOCK = 16  # symbol periods between updates of the track


@kernel
def known_reference(
    channel: C128, pointer: I64, antenna: I64, value: C64, i: int, real: F32, imag: F32
) -> None:
    """H x of known vector i into real, imag (Nr,)."""
    for r in range(real.size):
        v = 0j
        for j in range(pointer[i], pointer[i + 1]):
            v += channel[r, antenna[j]] * value[j]
        real[r] = v.real
        imag[r] = v.imag


@kernel
def soft_reference(
    g_real: F32, g_imag: F32, g_power: F32, z_real: F32, z_imag: F32, inverse_noise: np.float32,
    metric: F32, index: I64, weight: F32, real: F32, imag: F32,
) -> int:
    """Posterior mean of H x into real, imag (Nr,); returns the number of weights filled."""
    best = codeword_metrics(g_real, g_imag, g_power, z_real, z_imag, metric)
    count = posterior(metric, best, inverse_noise, index, weight)
    for r in range(real.size):
        a = np.float32(0.0)
        b = np.float32(0.0)
        for j in range(count):
            a += weight[j] * g_real[r, index[j]]
            b += weight[j] * g_imag[r, index[j]]
        real[r] = a
        imag[r] = b
    return count


@kernel
def track_side(
    planes: F32, t0: float, step: float, order: I64, active: I64, active_word: I64,
    pointer: I64, antenna: I64, value: C64, amplitude: F32, channel: C128, g_real: F32,
    g_imag: F32, g_power: F32, noise: float, centroid: float, prior: F64, walk: float, taps: F32,
    slopes: F32, phases: int, slope_energy: float, with_timing: bool, phase: F32, track: F64,
) -> None:
    """Track from the header outwards over the active periods listed in `order`.

    Args:
        order: indices into `active`, in the order of travel.
        prior: (6,); var(phase), var(carrier), var(timing), var(step) at the header's centroid, then
            unused.
        phase: float32 (Ka,); filled at the periods travelled.
        track: (4,); filled with the corrections of t0 and step, and the phase and its slope at the
            header's centroid.
    """
    channels, size = g_real.shape
    y, d = np.empty((1, 2, channels), np.float32), np.empty((1, 2, channels), np.float32)
    z_real, z_imag = np.empty(channels, np.float32), np.empty(channels, np.float32)
    m_real, m_imag = np.empty(channels, np.float32), np.empty(channels, np.float32)
    metric, weight = np.empty(size, np.float32), np.empty(size, np.float32)
    index = np.empty(size, np.int64)
    blocks = (order.size + BLOCK - 1) // BLOCK
    position = np.empty(blocks)
    filtered, filtered_cov = np.empty((blocks, 2)), np.empty((blocks, 3))
    state, cov = np.zeros(2), np.array([prior[0], 0.0, prior[1]])
    t_state, t_cov = np.zeros(2), np.array([prior[2], 0.0, prior[3]])
    at = centroid
    for b in range(blocks):
        begin, end = b * BLOCK, min(order.size, (b + 1) * BLOCK)
        here = float(active[order[begin]])
        predict(state, cov, here - at, walk)
        predict(t_state, t_cov, here - at, 0.0)
        at = here
        score, score_k, w, wk, wkk = 0.0, 0.0, 0.0, 0.0, 0.0
        t_score, t_score_k = 0.0, 0.0
        for n in range(begin, end):
            i = order[n]
            k = active[i] - here
            t = t0 + active[i] * step + t_state[0] + t_state[1] * k
            filter_at(planes, t, taps, phases, y, 0)
            angle = np.float32(state[0] + state[1] * k)
            c, s = np.cos(angle), np.sin(angle)
            scale = np.float32(1.0) / amplitude[i]
            for r in range(channels):
                re = y[0, 0, r] * scale
                im = y[0, 1, r] * scale
                z_real[r] = re * c + im * s
                z_imag[r] = im * c - re * s
            if active_word[i] >= 0:
                inverse_noise = np.float32(1.0 / (noise * scale * scale))
                soft_reference(
                    g_real, g_imag, g_power, z_real, z_imag, inverse_noise, metric, index, weight,
                    m_real, m_imag,
                )
            else:
                known_reference(channel, pointer, antenna, value, i, m_real, m_imag)
            error, energy = np.float32(0.0), np.float32(0.0)
            for r in range(channels):
                error += m_real[r] * z_imag[r] - m_imag[r] * z_real[r]
                energy += m_real[r] * m_real[r] + m_imag[r] * m_imag[r]
            # In the units of the sent symbol: both error and energy carry amplitude squared.
            square = amplitude[i] * amplitude[i]
            score += error * square
            score_k += error * square * k
            w += energy * square
            wk += energy * square * k
            wkk += energy * square * k * k
            if with_timing:
                filter_at(planes, t, slopes, phases, d, 0)
                total = np.float32(0.0)
                for r in range(channels):
                    re = d[0, 0, r] * c + d[0, 1, r] * s
                    im = d[0, 1, r] * c - d[0, 0, r] * s
                    total += (m_real[r] * re + m_imag[r] * im) * scale
                t_score += total * square
                t_score_k += total * square * k
        gain = 2.0 / noise
        update(state, cov, gain * score, gain * score_k, gain * w, gain * wk, gain * wkk)
        if with_timing and w > 0.0:
            # Symbols beyond the block's edges are not yet known: their pulses add to the score
            # about (w/n)^2 / step^2, on top of the thermal w * slope_energy * N0 / 2.
            thermal = w * slope_energy * noise / 2.0
            edge = (w / (end - begin)) ** 2 / (step * step)
            t_gain = slope_energy * w / (thermal + edge)
            update(
                t_state, t_cov, t_gain * t_score, t_gain * t_score_k,
                t_gain * slope_energy * w, t_gain * slope_energy * wk, t_gain * slope_energy * wkk,
            )
        position[b] = here
        filtered[b, 0], filtered[b, 1] = state[0], state[1]
        for j in range(3):
            filtered_cov[b, j] = cov[j]
    smoothed = np.empty((blocks, 2))
    smooth(blocks, position, filtered, filtered_cov, walk, smoothed)
    for b in range(blocks):
        for n in range(b * BLOCK, min(order.size, (b + 1) * BLOCK)):
            i = order[n]
            phase[i] = smoothed[b, 0] + smoothed[b, 1] * (active[i] - position[b])
    track[0] = t_state[0] - t_state[1] * at
    track[1] = t_state[1]
    track[2] = smoothed[0, 0] + smoothed[0, 1] * (centroid - position[0])
    track[3] = smoothed[0, 1]
