"""Kernels of framing: bare arrays in and out."""

from __future__ import annotations

from spatiq.kernels import F32, kernel


@kernel
def cut_window(samples: F32, window: F32, low: float, high: float, begin: int, end: int) -> int:
    """Copy samples (Nr, 2, W) into window, counting clipped ones.

    Returns:
        Samples of begin..end-1 of which a part lies at or beyond low or high, all channels.
    """
    clipped = 0
    for r in range(samples.shape[0]):
        for i in range(samples.shape[2]):
            window[r, 0, i] = samples[r, 0, i]
            window[r, 1, i] = samples[r, 1, i]
        for i in range(begin, min(end, samples.shape[2])):
            re, im = samples[r, 0, i], samples[r, 1, i]
            clipped += (re <= low) | (re >= high) | (im <= low) | (im >= high)
    return clipped
