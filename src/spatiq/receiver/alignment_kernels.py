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
        y, reference: float32 (Ka, 2, Nr); received vectors and H E[x].
        mean: complex64 (Ka, Nt); E[x].
        channel: complex128 (Nr, Nt).
        active: (Ka,); periods.
        slope: g'(1) of the pulse's autocorrelation, per symbol period; negative.
        score, energy: float64 (Nr, Nt); filled.
    """
    score[:] = 0.0
    energy[:] = 0.0
    channels, antennas = channel.shape
    last = active.size - 1
    error_re = np.empty(channels)
    error_im = np.empty(channels)
    for i in range(active.size):
        neighbours = 0.0
        error_re[:] = 0.0
        error_im[:] = 0.0
        if i < last and active[i + 1] == active[i] + 1:
            neighbours += 1.0
            for r in range(channels):
                error_re[r] -= y[i + 1, 0, r] - reference[i + 1, 0, r]
                error_im[r] -= y[i + 1, 1, r] - reference[i + 1, 1, r]
        if i > 0 and active[i - 1] == active[i] - 1:
            neighbours += 1.0
            for r in range(channels):
                error_re[r] += y[i - 1, 0, r] - reference[i - 1, 0, r]
                error_im[r] += y[i - 1, 1, r] - reference[i - 1, 1, r]
        for a in range(antennas):
            x = mean[i, a]
            if x.real == 0.0 and x.imag == 0.0:
                continue
            for r in range(channels):
                v = channel[r, a] * x
                score[r, a] += v.real * error_re[r] + v.imag * error_im[r]
                energy[r, a] += neighbours * (v.real * v.real + v.imag * v.imag)
    for r in range(channels):
        for a in range(antennas):
            score[r, a] *= slope
            energy[r, a] *= slope * slope
