"""Kernels of the timing refit: what a frame tells about timing and clock, and the step to take."""

from __future__ import annotations

import numpy as np

from spatiq.kernels import F32, F64, I64, kernel


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
    timing: F64,
) -> None:
    """Newton step for t0 and step, with a prior on step.

    timing (4,): t0 and step, corrected in place, and their variances, filled. All pulses are known
    to lie between known neighbours, so that the score holds no intersymbol term (it is
    antisymmetric and cancels).
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
    if j11 > 0.0 and det > 0.0:
        timing[0] += gain * (j22 * score - j12 * score_k) / det
        timing[1] += gain * (j11 * score_k - j12 * score) / det
        timing[2] = j22 / det
        timing[3] = j11 / det
