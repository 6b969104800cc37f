"""Kernels of tracking and refit: received codebook, posterior of codewords, two-state filter.

Received vectors are held as float32 real and imaginary parts so that loops over the C codewords
vectorise.
"""

from __future__ import annotations

import numpy as np

from spatiq.kernels import C64, C128, F32, F64, I32, I64, inlined, kernel

# Codewords below exp(-14) = 1e-6 of the best one's likelihood change no estimate noticeably.
POSTERIOR_CUT = np.float32(14.0)
VECTORS = 64  # received vectors handled at once where nothing has to be updated in between


@kernel
def received_codebook(
    channel: C128, pointer: I64, antenna: I64, value: C64, real: F32, imag: F32, power: F32
) -> None:
    """H x[c] for all c into real, imag (Nr, C), and ||H x[c]||^2 into power (C,)."""
    for c in range(power.size):
        total = 0.0
        for r in range(channel.shape[0]):
            v = 0j
            for j in range(pointer[c], pointer[c + 1]):
                v += channel[r, antenna[j]] * value[j]
            real[r, c] = v.real
            imag[r, c] = v.imag
            total += v.real * v.real + v.imag * v.imag
        power[c] = total


@kernel
def floored_noise(noise: float, power: F32) -> float:
    """N0 of a noiseless capture is single-precision rounding of ||H x[c]||^2 (C,), never zero."""
    total = 0.0
    for c in range(power.size):
        total += float(power[c])
    return max(noise, 1e-12 * total / power.size, 1e-30)


@kernel
def block_metrics(
    real: F32,
    imag: F32,
    power: F32,
    z_real: F32,
    z_imag: F32,
    count: int,
    metric: F32,
    best: F32,
    second: F32,
    nearest: I32,
) -> None:
    """||H x[c]||^2 - 2 Re(y^H H x[c]) of all codewords for a block of `count` received vectors.

    The innermost loop runs over the block, so that it vectorises whatever the number of codewords.

    Args:
        real, imag: float32 (Nr, C); received codebook.
        power: float32 (C,).
        z_real, z_imag: float32 (Nr, B); received vectors, B >= count.
        metric: float32 (C, B); filled.
        best, nearest: (B,); smallest metric and its codeword (the lowest one on a tie), filled.
        second: (B,); second smallest metric, filled.
    """
    smallest = best[:count]
    runner_up = second[:count]
    where = nearest[:count]
    channels = z_real.shape[0]
    last = channels - 1
    for c in range(power.size):
        row = metric[c, :count]
        # The first and last channel together: one pass over the block for two channels.
        a, b = np.float32(2.0) * real[0, c], np.float32(2.0) * imag[0, c]
        d, e = np.float32(2.0) * real[last, c], np.float32(2.0) * imag[last, c]
        if last == 0:
            d, e = np.float32(0.0), np.float32(0.0)
        first_real, first_imag = z_real[0, :count], z_imag[0, :count]
        last_real, last_imag = z_real[last, :count], z_imag[last, :count]
        for k in range(count):
            near = a * first_real[k] + b * first_imag[k]
            row[k] = power[c] - near - (d * last_real[k] + e * last_imag[k])
        for r in range(1, last):
            a, b = np.float32(2.0) * real[r, c], np.float32(2.0) * imag[r, c]
            first_real, first_imag = z_real[r, :count], z_imag[r, :count]
            for k in range(count):
                row[k] -= a * first_real[k] + b * first_imag[k]
        if c == 0:
            for k in range(count):
                smallest[k] = row[k]
                runner_up[k] = np.float32(3.0e38)
                where[k] = 0
        else:
            for k in range(count):
                nearer = row[k] < smallest[k]
                behind = smallest[k] if nearer else row[k]
                runner_up[k] = behind if behind < runner_up[k] else runner_up[k]
                smallest[k] = row[k] if nearer else smallest[k]
                where[k] = c if nearer else where[k]


@kernel
def block_posterior(
    metric: F32,
    best: F32,
    second: F32,
    nearest: I32,
    inverse_noise: F32,
    count: int,
    index: I64,
    weight: F32,
    used: I64,
) -> None:
    """Codewords of noticeable posterior probability for each vector of a block.

    One call for the block: called for each vector, handing the arrays over would cost more than
    the work.

    Args:
        metric, best, second, nearest: of `block_metrics`.
        inverse_noise: float32 (B,); 1/N0 at each vector.
        count: vectors in the block.
        index, weight: (B, C); codewords and probabilities, `used[k]` of them, filled.
        used: (B,); filled.
    """
    for k in range(count):
        smallest = best[k]
        limit = smallest + POSTERIOR_CUT / inverse_noise[k]
        if second[k] > limit:
            index[k, 0] = nearest[k]
            weight[k, 0] = np.float32(1.0)
            used[k] = 1
            continue
        n = 0
        total = np.float32(0.0)
        for c in range(metric.shape[0]):
            if metric[c, k] <= limit:
                w = np.exp((smallest - metric[c, k]) * inverse_noise[k])
                index[k, n] = c
                weight[k, n] = w
                total += w
                n += 1
        scale = np.float32(1.0) / total
        for i in range(n):
            weight[k, i] *= scale
        used[k] = n


@kernel
def block_scratch(size: int, vectors: int) -> tuple[F32, F32, F32, I32, F32, I64, F32, I64]:
    """Room for `block_metrics` and `block_posterior`: a codebook of `size`, blocks of `vectors`.

    metric (C, B); best, second, nearest, inverse noise (B,); index, weight (B, C); used (B,).
    """
    return (
        np.empty((size, vectors), np.float32),
        np.empty(vectors, np.float32),
        np.empty(vectors, np.float32),
        np.empty(vectors, np.int32),
        np.empty(vectors, np.float32),
        np.empty((vectors, size), np.int64),
        np.empty((vectors, size), np.float32),
        np.empty(vectors, np.int64),
    )


@inlined
def predict(state: F64, covariance: F64, distance: float, walk: float) -> None:
    """Carry a (value, rate) state over `distance` symbol periods; `walk`: variance per period.

    state (2,); covariance (3,) holds var(value), cov, var(rate).
    """
    state[0] += state[1] * distance
    covariance[0] += (
        2.0 * distance * covariance[1] + distance * distance * covariance[2] + walk * abs(distance)
    )
    covariance[1] += distance * covariance[2]


@inlined
def update(
    state: F64, covariance: F64, score: float, score_k: float, w: float, wk: float, wkk: float
) -> None:
    """Take in a block of observations of the value at offsets k, in information form.

    score = sum of weighted errors, score_k = the same times k; w, wk, wkk = sums of weights times
    1, k, k^2. Kalman update, e.g. B. D. O. Anderson and J. B. Moore, "Optimal Filtering", ch. 6.
    """
    det = covariance[0] * covariance[2] - covariance[1] * covariance[1]
    if det <= 0.0:
        return
    j11 = covariance[2] / det + w
    j12 = -covariance[1] / det + wk
    j22 = covariance[0] / det + wkk
    det = j11 * j22 - j12 * j12
    covariance[0] = j22 / det
    covariance[1] = -j12 / det
    covariance[2] = j11 / det
    state[0] += covariance[0] * score + covariance[1] * score_k
    state[1] += covariance[1] * score + covariance[2] * score_k


@kernel
def smooth(
    count: int, position: F64, filtered: F64, filtered_cov: F64, walk: float, smoothed: F64
) -> None:
    """Rauch-Tung-Striebel smoothing of block states.

    Method: H. E. Rauch, F. Tung, C. T. Striebel, AIAA J. 3(8), 1965.

    Args:
        count: number of blocks.
        position: (n,); period each state refers to.
        filtered, filtered_cov: (n, 2) and (n, 3); after each block's update.
        walk: variance of the value's random walk per period.
        smoothed: (n, 2); filled.
    """
    if count == 0:
        return
    smoothed[count - 1, 0] = filtered[count - 1, 0]
    smoothed[count - 1, 1] = filtered[count - 1, 1]
    for b in range(count - 2, -1, -1):
        d = position[b + 1] - position[b]
        p11, p12, p22 = filtered_cov[b, 0], filtered_cov[b, 1], filtered_cov[b, 2]
        a11 = p11 + 2 * d * p12 + d * d * p22 + walk * abs(d)
        a12 = p12 + d * p22
        det = a11 * p22 - a12 * a12
        e0 = smoothed[b + 1, 0] - (filtered[b, 0] + d * filtered[b, 1])
        e1 = smoothed[b + 1, 1] - filtered[b, 1]
        if det <= 0.0 or walk == 0.0:
            # No process noise: the later state carried back exactly.
            smoothed[b, 0] = smoothed[b + 1, 0] - d * smoothed[b + 1, 1]
            smoothed[b, 1] = smoothed[b + 1, 1]
            continue
        c11 = p11 + d * p12  # P F^T
        c12 = p12
        c21 = p12 + d * p22
        c22 = p22
        i0 = (p22 * e0 - a12 * e1) / det
        i1 = (a11 * e1 - a12 * e0) / det
        smoothed[b, 0] = filtered[b, 0] + c11 * i0 + c12 * i1
        smoothed[b, 1] = filtered[b, 1] + c21 * i0 + c22 * i1
