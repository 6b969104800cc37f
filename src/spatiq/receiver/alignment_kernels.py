"""Kernel of alignment: what a frame's residuals say about delays, at next to no cost."""

from __future__ import annotations

import numpy as np

from spatiq.kernels import C64, C128, F32, F64, I64, kernel


@kernel
def delay_scores(
    y: F32,
    reference: F32,
    mean: C64,
    channel: C128,
    active: I64,
    slope: float,
    score: F64,
    energy: F64,
) -> None:
    """Delay score and energy of each pair of receive channel and transmit antenna.

    A symbol that arrives d symbol periods late leaves -d g'(+-1) of itself in the residuals one
    period before and after; all else in them is noise. So the score is d times the energy, with
    noise of variance N0 / 2 times the energy: about half the information about d that the waveform
    holds, without a filter's work.

    Args:
        y, reference: float32 (Ka, 2, Nr); received vectors, and H E[x] as they were fitted to.
        mean: complex64 (Ka, Nt); E[x].
        channel: complex128 (Nr, Nt).
        active: (Ka,); periods.
        slope: g'(1) of the pulse's autocorrelation, per symbol period; negative.
        score, energy: float64 (Nr, Nt); filled.
    """
    channels, antennas = channel.shape
    pushes, powers = np.zeros((antennas, channels)), np.zeros((antennas, channels))
    before, here, after = np.zeros((3, 2, channels), np.float32)
    last = active.size - 1
    for r in range(channels):
        for part in range(2):
            after[part, r] = y[0, part, r] - reference[0, part, r]
    for i in range(last + 1):
        before, here, after = here, after, before
        # Errors of the neighbours, weighted 0 where there is a gap in between.
        gate_before, gate_after = np.float32(0.0), np.float32(0.0)
        if i > 0 and active[i - 1] == active[i] - 1:
            gate_before = np.float32(1.0)
        if i < last and active[i + 1] == active[i] + 1:
            gate_after = np.float32(1.0)
        if i < last:
            for part in range(2):
                for r in range(channels):
                    after[part, r] = y[i + 1, part, r] - reference[i + 1, part, r]
        neighbours = gate_before + gate_after
        only, some = -1, 0
        for a in range(antennas):
            if mean[i, a].real != 0.0 or mean[i, a].imag != 0.0:
                only = a
                some += 1
        for a in range(only if some == 1 else 0, only + 1):
            x = mean[i, a]
            if some > 1 and x.real == 0.0 and x.imag == 0.0:
                continue
            for r in range(channels):
                if some == 1:
                    re, im = reference[i, 0, r], reference[i, 1, r]
                else:
                    v = channel[r, a] * x
                    re, im = np.float32(v.real), np.float32(v.imag)
                error_re = gate_before * before[0, r] - gate_after * after[0, r]
                error_im = gate_before * before[1, r] - gate_after * after[1, r]
                pushes[a, r] += re * error_re + im * error_im
                powers[a, r] += neighbours * (re * re + im * im)
    for r in range(channels):
        for a in range(antennas):
            score[r, a] = slope * pushes[a, r]
            energy[r, a] = slope * slope * powers[a, r]


@kernel
def lag_energies(
    y: F32, places: I64, active: I64, known: tuple[I64, I64, C64], energy: F64
) -> None:
    """How well each antenna's known symbols match what comes a period before, with, and after them.

    An antenna a whole period out of step leaves nothing where it is looked for: no residual tells
    its delay, this does.

    Args:
        y: float32 (Ka, 2, Nr); received vectors.
        places: (Kh,); known symbols of sync and pilots among the active periods.
        active: (Ka,); periods.
        known: pointer, antenna, value of each of the Kh.
        energy: float64 (Nt, 3, Nr); filled with |sum over k of conj(x_k) y_{k+d, r}|^2, d = -1, 0,
            1.
    """
    pointer, antenna, value = known
    channels = y.shape[2]
    sums = np.zeros((energy.shape[0], 3, channels), np.complex128)
    for n in range(places.size):
        i = places[n]
        for d in range(-1, 2):
            j = i + d
            if j < 0 or j >= active.size or active[j] - active[i] != d:
                continue
            for m in range(pointer[n], pointer[n + 1]):
                x = np.conj(value[m])
                for r in range(channels):
                    sums[antenna[m], d + 1, r] += x * complex(y[j, 0, r], y[j, 1, r])
    for a in range(energy.shape[0]):
        for d in range(3):
            for r in range(channels):
                energy[a, d, r] = sums[a, d, r].real ** 2 + sums[a, d, r].imag ** 2
