"""What the refit's residuals say about each stretch of a frame, as a few sums."""

from __future__ import annotations

import numpy as np

from spatiq.kernels import F32, F64, I64, kernel


@kernel
def block_scores(
    y: F32,
    reference: F32,
    slope: F32,
    density: F64,
    active: I64,
    active_word: I64,
    in_doubt: float,
    moved: tuple[float, float],
    block: int,
    scores: F64,
) -> None:
    """Sums over blocks of active periods, from what the refit leaves behind.

    Doubtful words leave E[x] short of its energy: what is missing, spread evenly over the payload,
    is added to the residual energy and taken from the gain score, so that neither depends on
    whether a period's word is known.

    Args:
        y, reference: float32 (Ka, 2, Nr); received vectors, carrier phase removed, and H E[x].
        slope: float32 (Ka, 2, Nr); filter outputs of the pulse's derivative before the timing was
            corrected.
        density: (Ka,); information about timing, times N0/2.
        active, active_word: (Ka,); periods; payload word or -1.
        in_doubt: sum over payload of E||H x||^2 - ||H E[x]||^2.
        moved: corrections of t0 and step since `slope` was taken, samples.
        block: periods to a row.
        scores: (B, 6), filled: periods; reference energy; residual energy; sums of the scores of
            gain, phase and timing: the derivatives of the log-likelihood with respect to a common
            amplitude, a common phase and a common delay, times N0/2.
    """
    count, channels = y.shape[0], y.shape[2]
    payload = 0
    for i in range(count):
        payload += active_word[i] >= 0
    share = in_doubt / payload if payload > 0 else 0.0
    for b in range(scores.shape[0]):
        first, stop = b * block, min(count, (b + 1) * block)
        energy, error, along = np.float32(0.0), np.float32(0.0), np.float32(0.0)
        turn, delay = np.float32(0.0), np.float32(0.0)
        moving, doubtful = 0.0, 0
        for i in range(first, stop):
            # Over channels and parts at once: one short loop instead of several.
            for r in range(channels):
                a, c = reference[i, 0, r], reference[i, 1, r]
                u, v = y[i, 0, r] - a, y[i, 1, r] - c
                energy += a * a + c * c
                error += u * u + v * v
                along += a * u + c * v
                turn += a * v - c * u
                delay += a * slope[i, 0, r] + c * slope[i, 1, r]
            moving += density[i] * (moved[0] + moved[1] * active[i])
            doubtful += active_word[i] >= 0
        row = scores[b]
        row[0] = stop - first
        row[1] = float(energy) + doubtful * share
        row[2] = float(error) + doubtful * share
        row[3] = float(along) - doubtful * share
        row[4] = turn
        row[5] = float(delay) - moving
