"""Hot loops behind the predicted bit error ratio: union bound and Monte Carlo for one channel.

All kernels take bare arrays. `gr`, `gi` are float32, C-contiguous, shape (Nr, C): real and
imaginary part of the received constellation H x[c] / sqrt(N0), so that the noise has unit variance
per complex component. Sums over words run in float64.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from spatiq.kernels import kernel
from spatiq.metrics.gaussian_tables import decay, density, tail

F32 = NDArray[np.float32]
F64 = NDArray[np.float64]
I64 = NDArray[np.int64]

# A pair whose exponent lies this far above the nearest pair adds less than 2e-8 of its term; a word
# this far above the minimum has a posterior probability below 7e-6: both are left out.
PAIR_RANGE = 18.0
NEAR_RANGE = 12.0
# Wrong bits drawn from which on spatial and signal bits each have a ratio of their own. A quotient
# of fewer is biased low: where one kind is rare, it takes the ratio of all bits.
OWN_RATIO_FROM = 0.2


@kernel
def received_points(h: NDArray[np.complex64], x: NDArray[np.complex64], gr: F32, gi: F32) -> None:
    """Write H x[c] for one channel: h (Nr, Nt), x (C, Nt) -> gr, gi (Nr, C), float32."""
    gr[:] = 0.0
    gi[:] = 0.0
    for c in range(x.shape[0]):
        for a in range(x.shape[1]):
            xr = x[c, a].real
            xi = x[c, a].imag
            if xr == 0.0 and xi == 0.0:
                continue
            for r in range(h.shape[0]):
                hr = h[r, a].real
                hi = h[r, a].imag
                gr[r, c] += hr * xr - hi * xi
                gi[r, c] += hr * xi + hi * xr


@kernel
def squared_distances(yr: F32, yi: F32, gr: F32, gi: F32, first: int, out: F32) -> None:
    """out[c] = sum_r |y_r - g_rc|^2 for c >= first; y (Nr,), out (C,), all float32."""
    out[first:] = 0.0
    for r in range(gr.shape[0]):
        for c in range(first, gr.shape[1]):
            dr = yr[r] - gr[r, c]
            di = yi[r] - gi[r, c]
            out[c] += dr * dr + di * di


@kernel
def scaled_words(x: NDArray[np.complex64], scale: F32, wr: F32, wi: F32) -> None:
    """Write scale[a] * x[c, a]: x (C, Nt), scale (Nt,) -> wr, wi (Nt, C), float32."""
    for c in range(x.shape[0]):
        for a in range(x.shape[1]):
            wr[a, c] = scale[a] * x[c, a].real
            wi[a, c] = scale[a] * x[c, a].imag


@kernel
def inner_products(c: int, wr: F32, wi: F32, first: int, out: F32) -> None:
    """out[d] = Re sum_a conj(w_ac) w_ad for d >= first; w (Nt, C), out (C,), float32."""
    out[first:] = 0.0
    for a in range(wr.shape[0]):
        vr = wr[a, c]
        vi = wi[a, c]
        if vr == 0.0 and vi == 0.0:
            continue
        for d in range(first, wr.shape[1]):
            out[d] += vr * wr[a, d] + vi * wi[a, d]


@kernel
def word_powers(wr: F32, wi: F32, out: F32) -> None:
    """out[c] = sum_a |w_ac|^2; w (Nt, C), out (C,), float32."""
    out[:] = 0.0
    for a in range(wr.shape[0]):
        for c in range(wr.shape[1]):
            out[c] += wr[a, c] * wr[a, c] + wi[a, c] * wi[a, c]


@kernel
def corrected_tail(half: float, common: float, lost: float, receivers: int) -> float:
    """Pairwise error probability from an estimate: Q(z exp(-s/2)), s = v + (2 Nr - 1) k / z^2.

    `half` is z^2/2, `common` is v/N0, `lost` is k/N0 (module `prediction`).
    """
    if half <= 0.0:
        return 0.5
    shift = common + (2.0 * receivers - 1.0) * lost / (2.0 * half)
    return tail(math.sqrt(2.0 * half) * math.exp(-0.5 * shift))


@kernel
def union_bound_pairs(
    gr: F32,
    gi: F32,
    wr: F32,
    wi: F32,
    rows: I64,
    weights: F32,
    sets: I64,
    sums: F64,
    shares: F64,
) -> None:
    """Sums over pairs of words of the error probability, corrected for estimation error.

    Args:
        gr, gi: received constellation, (Nr, C).
        wr, wi: words times the estimation error's deviation over the noise's, (Nt, C); (0, C) when
            the channel is known exactly.
        rows: words taken as sent; all C of them in order, or a subset.
        weights: (2, C): wrong spatial and wrong signal bits of the pattern sent XOR decided.
        sets: (C,) antenna set of each word.
        sums: (4,) out, over `rows`: corrected bound of spatial and of signal bit errors, plain
        bound
            of all bit errors, and its derivative with respect to log N0.
        shares: (A, A) out: sums of probabilities by set; (0, 0) when not wanted.
    """
    nr, size = gr.shape
    whole = rows.size == size
    times = 2.0 if whole else 1.0
    sums[:] = 0.0
    shares[:] = 0.0
    distance = np.empty(size, np.float32)
    common = np.zeros(size, np.float32)
    power = np.empty(size, np.float32)
    word_powers(wr, wi, power)
    nearest = np.inf
    for i in range(rows.size):
        c = rows[i]
        first = c + 1 if whole else 0
        squared_distances(gr[:, c].copy(), gi[:, c].copy(), gr, gi, first, distance)
        inner_products(c, wr, wi, first, common)
        for d in range(first, size):
            half = 0.25 * float(distance[d])  # z^2 / 2 with z = ||D|| / sqrt(2 N0)
            if half > nearest + PAIR_RANGE or d == c:
                continue
            nearest = min(nearest, half)
            z = math.sqrt(2.0 * half)
            plain = tail(z)
            error = plain
            if wr.shape[0] > 0:
                shared = float(common[d])
                lost = 0.5 * float(power[c] + power[d]) - shared
                error = corrected_tail(half, shared, lost, nr)
            add_pair(c, d, error, times, weights, sets, sums, shares)
            bits = float(weights[0, c ^ d] + weights[1, c ^ d])
            sums[2] += times * bits * plain
            sums[3] += times * bits * 0.5 * z * density(z)


@kernel
def add_pair(
    c: int, d: int, error: float, times: float, weights: F32, sets: I64, sums: F64, shares: F64
) -> None:
    """Enter one pair, sent c and decided d, or both ways round when `times` is 2."""
    sums[0] += times * float(weights[0, c ^ d]) * error
    sums[1] += times * float(weights[1, c ^ d]) * error
    if shares.shape[0] > 0:
        shares[sets[c], sets[d]] += error
        if times > 1.0:
            shares[sets[d], sets[c]] += error


@kernel
def near_words(metric: F32, reach: float, near: I64, posterior: F32) -> int:
    """List the words within `reach` of the smallest metric, the smallest first.

    Writes their indices to `near` and exp(smallest - metric), normalised to sum 1, to `posterior`;
    returns how many there are. All arrays (C,).
    """
    best = 0
    for c in range(1, metric.size):
        if metric[c] < metric[best]:
            best = c
    limit = metric[best] + reach
    near[0] = best
    posterior[0] = 1.0
    count = 1
    for c in range(metric.size):
        if metric[c] <= limit and c != best:
            near[count] = c
            count += 1
    total = 1.0
    for k in range(1, count):
        posterior[k] = decay(metric[near[k]] - metric[best])
        total += posterior[k]
    for k in range(count):
        posterior[k] = posterior[k] / total
    return count


@kernel
def monte_carlo(
    gr: F32,
    gi: F32,
    rows: I64,
    noise_r: F32,
    noise_i: F32,
    weights: F32,
    sets: I64,
    count_bound: bool,
    sums: F64,
    shares: F64,
) -> None:
    """Expected wrong bits of the minimum-distance decision, summed over all draws.

    Args:
        gr, gi: received constellation over the noise's standard deviation, (Nr, C).
        rows: words sent.
        noise_r, noise_i: (rows.size, J, Nr) unit noise: J draws for each word sent.
        weights, sets: as for `union_bound_pairs`.
        count_bound: also count what the union bound counts on the same draws.
        sums: (4,) out: wrong spatial and signal bits; spatial and signal bits as the bound counts.
        shares: (A, A) out: draws by set sent, set decided; (0, 0) when not wanted.
    """
    nr, size = gr.shape
    metric = np.empty(size, np.float32)
    near = np.empty(size, np.int64)
    posterior = np.empty(size, np.float32)
    yr = np.empty(nr, np.float32)
    yi = np.empty(nr, np.float32)
    sums[:] = 0.0
    shares[:] = 0.0
    for i in range(rows.size):
        c = rows[i]
        for j in range(noise_r.shape[1]):
            for r in range(nr):
                yr[r] = gr[r, c] + noise_r[i, j, r]
                yi[r] = gi[r, c] + noise_i[i, j, r]
            squared_distances(yr, yi, gr, gi, 0, metric)
            count = near_words(metric, NEAR_RANGE, near, posterior)
            best = near[0]
            for k in range(1, count):
                sent = near[k]
                p = posterior[k]
                sums[0] += p * weights[0, sent ^ best]
                sums[1] += p * weights[1, sent ^ best]
                if shares.shape[0] > 0:
                    shares[sets[sent], sets[best]] += p
            if count_bound:
                count_nearer(metric, near, posterior, count, weights, sums)


@kernel
def count_nearer(
    metric: F32, near: I64, posterior: F32, count: int, weights: F32, sums: F64
) -> None:
    """Add what the union bound counts on one draw: every word nearer than the word sent."""
    for k in range(1, count):
        sent = near[k]
        p = posterior[k]
        spatial = np.float32(0.0)
        signal = np.float32(0.0)
        for m in range(count):
            nearer = near[m]
            if metric[nearer] < metric[sent]:
                spatial += weights[0, sent ^ nearer]
                signal += weights[1, sent ^ nearer]
        sums[2] += p * spatial
        sums[3] += p * signal


@kernel
def effective_noise(pairs: F64) -> float:
    """Noise, in units of N0, at which the plain union bound equals the corrected one.

    One Newton step in logarithms; `pairs` (4,) from `union_bound_pairs`.
    """
    if pairs[3] <= 0.0:  # no signal at all: any noise gives the same errors
        return 1.0
    return math.exp(math.log((pairs[0] + pairs[1]) / pairs[2]) * pairs[2] / pairs[3])


@kernel
def refine(
    gr: F32,
    gi: F32,
    rows: I64,
    noise_r: F32,
    noise_i: F32,
    weights: F32,
    sets: I64,
    scale_bound: bool,
    wrong: F64,
    shares: F64,
) -> None:
    """Replace the union bound of one frame by what draws show.

    Args:
        gr, gi, rows, noise_r, noise_i, weights, sets: as for `monte_carlo`.
        scale_bound: multiply the bound by wrong bits over bits that the bound counts on the same
            draws (a ratio estimate: both see the same rare draws, so that their quotient scatters
            little); otherwise take the mean of the draws.
        wrong: (2,) wrong spatial and signal bits per word, in and out.
        shares: (A, A) sums over `rows` by set sent, set decided, in and out; may be (0, 0).
    """
    sums = np.empty(4, np.float64)
    entered = np.empty((0, 0), np.float64) if scale_bound else shares
    monte_carlo(gr, gi, rows, noise_r, noise_i, weights, sets, scale_bound, sums, entered)
    if scale_bound:
        counted = sums[2] + sums[3]
        if counted > 0.0:
            common = (sums[0] + sums[1]) / counted
            spatial = (sums[0] + common * OWN_RATIO_FROM) / (sums[2] + OWN_RATIO_FROM)
            wrong[0] *= spatial
            multiply(shares, spatial)
            wrong[1] *= (sums[1] + common * OWN_RATIO_FROM) / (sums[3] + OWN_RATIO_FROM)
        return
    draws = noise_r.shape[1]
    wrong[0] = sums[0] / (rows.size * draws)
    wrong[1] = sums[1] / (rows.size * draws)
    multiply(shares, 1.0 / draws)


@kernel
def multiply(values: NDArray[np.floating], factor: float) -> None:
    """Multiply (n, m) in place. A loop: array expressions take numba seconds to compile."""
    for i in range(values.shape[0]):
        for j in range(values.shape[1]):
            values[i, j] *= factor


@kernel
def predict_frames(
    h: NDArray[np.complex64],
    scale: F32,
    x: NDArray[np.complex64],
    rows: I64,
    noise_r: F32,
    noise_i: F32,
    tables: I64,
    weights: F32,
    sets: I64,
    limits: F64,
    wrong: F64,
    confusion: F64,
) -> None:
    """Expected wrong spatial and signal bits per word, frame by frame.

    Args:
        h: (F, Nr, Nt) channels over sqrt(N0).
        scale: (F, Nt) standard deviation of the estimation error over sqrt(N0); (F, 0) when exact.
        x: (C, Nt) words.
        rows, weights, sets: as for `monte_carlo`.
        noise_r, noise_i: (P, rows.size, J, Nr) unit noise, P tables.
        tables: (F,) which of them each frame uses.
        limits: (2,) union bound in wrong bits per word: up to the first it stands alone, up to the
            second it is scaled by draws, above draws stand alone.
        wrong: (F, 2) out; NaN where a frame's channel or error variance is NaN.
        confusion: (A, A) in and out: sum over frames of the share of words by set sent and decided,
            of use off the diagonal only; (0, 0) when not wanted.
    """
    frames, nr, _ = h.shape
    size = x.shape[0]
    gr = np.empty((nr, size), np.float32)
    gi = np.empty((nr, size), np.float32)
    wr = np.empty((scale.shape[1], size), np.float32)
    wi = np.empty((scale.shape[1], size), np.float32)
    pairs = np.empty(4, np.float64)
    shares = np.zeros_like(confusion)
    for f in range(frames):
        received_points(h[f], x, gr, gi)
        if scale.shape[1] > 0:
            scaled_words(x, scale[f], wr, wi)
        union_bound_pairs(gr, gi, wr, wi, rows, weights, sets, pairs, shares)
        wrong[f, 0] = pairs[0] / rows.size
        wrong[f, 1] = pairs[1] / rows.size
        bound = wrong[f, 0] + wrong[f, 1]
        if bound > limits[0]:
            shrink = np.float32(1.0 / math.sqrt(effective_noise(pairs)))
            multiply(gr, float(shrink))
            multiply(gi, float(shrink))
            scale_bound = bound <= limits[1]
            table_r = noise_r[tables[f]]
            table_i = noise_i[tables[f]]
            refine(gr, gi, rows, table_r, table_i, weights, sets, scale_bound, wrong[f], shares)
        for i in range(confusion.shape[0]):
            for j in range(confusion.shape[1]):
                confusion[i, j] += shares[i, j] / rows.size
