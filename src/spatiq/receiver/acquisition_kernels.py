"""Kernels of acquisition: bare arrays in and out."""

from __future__ import annotations

import numpy as np

from spatiq.kernels import C64, C128, F32, F64, I64, kernel
from spatiq.receiver.matched_filter import sample_periods

# Known symbols, sparse: their periods; pointer, antenna and value as in `SparseVectors`.
Known = tuple[I64, I64, I64, C64]
# Filter bank: taps, slopes, phases, slope energy.
Bank = tuple[F32, F32, int, float]


@kernel
def correlate_known(y: F32, known: Known, carrier: float, origin: float, out: C128) -> None:
    """Z = X^H D_f^H Y into out complex128 (Nt, Nr).

    Args:
        y: float32 (n, 2, Nr); received vectors.
        known: known symbols.
        carrier: f, cycles per symbol period.
        origin: period at which D_f turns by nothing.
        out: filled.
    """
    periods, pointer, antenna, value = known
    out[:] = 0.0
    turn = 1.0 + 0.0j
    step = complex(np.cos(2 * np.pi * carrier), -np.sin(2 * np.pi * carrier))
    previous = -2
    for i in range(periods.size):
        if periods[i] == previous + 1 and i % 64 != 0:
            turn = turn * step
        else:
            angle = -2.0 * np.pi * carrier * (periods[i] - origin)
            turn = complex(np.cos(angle), np.sin(angle))
        previous = periods[i]
        for j in range(pointer[i], pointer[i + 1]):
            weight = np.conj(value[j]) * turn
            for r in range(y.shape[2]):
                out[antenna[j], r] += weight * complex(y[i, 0, r], y[i, 1, r])


@kernel
def projected_energy(z: C128, root: C128) -> float:
    """||W Z||^2."""
    total = 0.0
    for p in range(root.shape[0]):
        for r in range(z.shape[1]):
            v = 0j
            for a in range(root.shape[1]):
                v += root[p, a] * z[a, r]
            total += v.real * v.real + v.imag * v.imag
    return total


@kernel
def solve_channel(z: C128, root: C128, channel: C128) -> None:
    """H^T = W^H W Z, into channel complex128 (Nr, Nt)."""
    channel[:] = 0.0
    for p in range(root.shape[0]):
        for r in range(z.shape[1]):
            v = 0j
            for a in range(root.shape[1]):
                v += root[p, a] * z[a, r]
            for a in range(root.shape[1]):
                channel[r, a] += np.conj(root[p, a]) * v


@kernel
def parabola_top(left: float, centre: float, right: float) -> float:
    """Abscissa of the vertex through (-1, left), (0, centre), (1, right), within +-1."""
    bend = left - 2.0 * centre + right
    if bend >= 0.0:
        return 0.0
    return min(1.0, max(-1.0, 0.5 * (left - right) / bend))


@kernel
def carrier_score(
    y: F32, known: Known, carrier: float, root: C128, origin: float, z: C128
) -> float:
    """Likelihood of a carrier, the channel concentrated out; z complex128 (Nt, Nr) is scratch."""
    correlate_known(y, known, carrier, origin, z)
    return projected_energy(z, root)


@kernel
def carrier_peak(
    y: F32, known: Known, carrier: float, width: float, root: C128, origin: float, z: C128
) -> tuple[float, float]:
    """Top of a peak within +-width of a carrier, and its likelihood: parabolas ever narrower."""
    top = carrier_score(y, known, carrier, root, origin, z)
    for _ in range(3):
        left = carrier_score(y, known, carrier - width, root, origin, z)
        right = carrier_score(y, known, carrier + width, root, origin, z)
        moved = carrier + width * parabola_top(left, top, right)
        score = carrier_score(y, known, moved, root, origin, z)
        if score > top:
            carrier, top = moved, score
        width *= 0.25
    return carrier, top


@kernel
def highest_fringe(
    y: F32, known: Known, grid: F64, score: F64, top: int, root: C128, origin: float, z: C128
) -> float:
    """Carrier of the highest peak, where several are so close that the grid cannot tell.

    An antenna's known symbols that lie apart make fringes, whose tops a grid meets or misses: peaks
    that may lose out to the grid's largest point, `top`, by that alone are compared at their tops.
    A peak between grid points is at most 15 % higher than the larger of them.

    Args:
        y: float32 (n, 2, Nr); received vectors.
        known, root, origin: as for `acquire_frame`.
        grid, score: float64 (n,); carriers tried and their likelihood.
        top: index of the largest.
        z: scratch.
    """
    step = grid[1] - grid[0]
    carrier = float(grid[top])
    best = carrier_score(y, known, carrier, root, origin, z)
    for j in range(1, grid.size - 1):
        if score[j] < 0.85 * score[top] or score[j] < score[j - 1] or score[j] < score[j + 1]:
            continue
        at, height = carrier_peak(y, known, grid[j], step, root, origin, z)
        if height > best:
            best, carrier = height, at
    return carrier


@kernel
def rivals(score: F64, top: int) -> bool:
    """Whether another peak comes within 15 % of the largest point."""
    for j in range(1, score.size - 1):
        close = abs(j - top) > 1 and score[j] >= 0.85 * score[top]
        if close and score[j] >= score[j - 1] and score[j] >= score[j + 1]:
            return True
    return False


@kernel
def grid_search(
    planes: F32,
    t0: float,
    step: float,
    grid: F64,
    known: Known,
    root: C128,
    origin: float,
    bank: Bank,
) -> tuple[float, float]:
    """Timing and carrier of the likelihood's largest grid point, refined by parabolas."""
    taps, _, phases, _ = bank
    channels = planes.shape[0]
    y = np.empty((known[0].size, 2, channels), np.float32)
    z = np.empty((root.shape[1], channels), np.complex128)
    score = np.empty((3, grid.size))
    reach = 0.25 * step  # the search's lags lie half a symbol apart
    for i in range(3):
        sample_periods(planes, t0 + (i - 1) * reach, step, known[0], taps, phases, y)
        for j in range(grid.size):
            score[i, j] = carrier_score(y, known, grid[j], root, origin, z)
    top = int(np.argmax(score))
    i, j = top // grid.size, top % grid.size
    timing = t0 + (i - 1) * reach
    if i == 1:
        timing += reach * parabola_top(score[0, j], score[1, j], score[2, j])
    carrier = grid[j]
    if rivals(score[i], j):
        sample_periods(planes, timing, step, known[0], taps, phases, y)
        carrier = highest_fringe(y, known, grid, score[i], j, root, origin, z)
    elif 0 < j < grid.size - 1:
        bend = parabola_top(score[i, j - 1], score[i, j], score[i, j + 1])
        carrier += bend * (grid[1] - grid[0])
    return timing, carrier


@kernel
def scoring_step(
    y: F32,
    slope: F32,
    known: Known,
    carrier: float,
    origin: float,
    root: C128,
    channel: C128,
    slope_energy: float,
) -> tuple[float, float, float, float, float]:
    """One Fisher scoring step with the channel concentrated out.

    Args:
        y, slope: float32 (n, 2, Nr); filter outputs and their derivatives in time, per sample.
        known: known symbols.
        carrier: where the step starts, cycles per symbol period.
        origin: period to which the channel's phase refers.
        root: complex128 (rank, Nt); square root of the inverse Gram matrix.
        channel: complex128 (Nr, Nt); filled with the estimate at `carrier`.
        slope_energy: of the filter bank.

    Returns:
        Corrections of timing (samples) and carrier (cycles per symbol), N0, and the information
        (times N0/2) about the carrier in (radians per symbol)^-2 and about timing in samples^-2.
    """
    periods, pointer, antenna, value = known
    channels, antennas = y.shape[2], root.shape[1]
    z = np.empty((antennas, channels), np.complex128)
    correlate_known(y, known, carrier, origin, z)
    solve_channel(z, root, channel)
    # b = (k - origin) X H^T; its part outside the column space of X carries the carrier.
    xb = np.zeros((antennas, channels), np.complex128)
    model = np.empty((periods.size, channels), np.complex128)
    for i in range(periods.size):
        for r in range(channels):
            v = 0j
            for j in range(pointer[i], pointer[i + 1]):
                v += channel[r, antenna[j]] * value[j]
            model[i, r] = v
            for j in range(pointer[i], pointer[i + 1]):
                xb[antenna[j], r] += np.conj(value[j]) * v * (periods[i] - origin)
    drift = np.empty((channels, antennas), np.complex128)
    solve_channel(xb, root, drift)
    carrier_score, carrier_info, timing_score, timing_info, error = 0.0, 0.0, 0.0, 0.0, 0.0
    for i in range(periods.size):
        angle = -2.0 * np.pi * carrier * (periods[i] - origin)
        turn = complex(np.cos(angle), np.sin(angle))
        for r in range(channels):
            b = (periods[i] - origin) * model[i, r]
            for j in range(pointer[i], pointer[i + 1]):
                b -= drift[r, antenna[j]] * value[j]
            e = complex(y[i, 0, r], y[i, 1, r]) * turn - model[i, r]
            carrier_score += (np.conj(b) * e).imag
            carrier_info += b.real * b.real + b.imag * b.imag
            timing_score += (
                np.conj(model[i, r]) * complex(slope[i, 0, r], slope[i, 1, r]) * turn
            ).real
            timing_info += model[i, r].real ** 2 + model[i, r].imag ** 2
            error += e.real * e.real + e.imag * e.imag
    timing_info *= slope_energy
    # Complex unknowns: the channel's; real ones: carrier and timing, one complex together.
    freedom = max(periods.size * channels - root.shape[0] * channels - 1, 1)
    timing = timing_score / timing_info if timing_info > 0.0 else 0.0
    turn_rate = carrier_score / carrier_info if carrier_info > 0.0 else 0.0
    return timing, turn_rate / (2 * np.pi), error / freedom, carrier_info, timing_info


@kernel
def acquire_frame(
    planes: F32,
    t0: float,
    step: float,
    grid: F64,
    known: Known,
    root: C128,
    origin: float,
    bank: Bank,
    channel: C128,
) -> tuple[float, float, float, float, float]:
    """Maximum-likelihood timing and carrier of one frame; channel complex128 (Nr, Nt) is filled.

    Args:
        planes: float32 (Nr, 2, W); samples.
        t0, step: first guess of symbol 0's centre, and samples per symbol.
        grid: carriers to try, cycles per symbol; empty to start from the first guess.
        known: known symbols.
        root: complex128 (rank, Nt); square root of the inverse Gram matrix.
        origin: period to which the channel's phase refers.
        bank: filter bank.

    Returns:
        t0, carrier (cycles per symbol), N0, variance of the carrier ((rad/symbol)^2), of t0.
    """
    taps, slopes, phases, slope_energy = bank
    channels, periods = planes.shape[0], known[0]
    carrier = 0.0
    if grid.size > 0:
        t0, carrier = grid_search(planes, t0, step, grid, known, root, origin, bank)
    y = np.empty((periods.size, 2, channels), np.float32)
    slope = np.empty((periods.size, 2, channels), np.float32)
    noise, carrier_info, timing_info = 0.0, 0.0, 0.0
    for _ in range(2):
        sample_periods(planes, t0, step, periods, taps, phases, y)
        sample_periods(planes, t0, step, periods, slopes, phases, slope)
        timing, turn, noise, carrier_info, timing_info = scoring_step(
            y, slope, known, carrier, origin, root, channel, slope_energy
        )
        t0 += min(max(timing, -0.25 * step), 0.25 * step)
        carrier += turn
    half_noise = 0.5 * max(noise, 1e-30)
    frequency_var = half_noise / max(carrier_info, 1e-30)
    return t0, carrier, noise, frequency_var, half_noise / max(timing_info, 1e-30)
