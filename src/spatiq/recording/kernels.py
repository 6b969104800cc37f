"""Hot loops of reading: interleaved components of a file -> complex64 by channel."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from spatiq.kernels import kernel

# Frames per inner run: what a channel skips over is still in cache when the next one reads it.
_RUN = 2048


@kernel
def convert_integers(
    raw: NDArray[Any], rule: NDArray[Any], out: NDArray[np.float32], clipped: NDArray[np.int64]
) -> None:
    """(raw - offset) * scale, split by channel; counts samples at the ends of the range.

    Args:
        raw: integers in native byte order, shape (n, Nr, 2), C-contiguous.
        rule: offset, scale, low, high; shape (4,). A sample with a component <= low or >= high
            counts as clipped. float32 for components of up to 16 bits, else float64: the
            arithmetic is done in this type, in which the integers are exact.
        out: float32, shape (Nr, n, 2), C-contiguous; written.
        clipped: int64, shape (Nr,); added to.
    """
    frames, channels, _ = raw.shape
    offset, scale, low, high = rule[0], rule[1], rule[2], rule[3]
    for first in range(0, frames, _RUN):
        last = min(first + _RUN, frames)
        for c in range(channels):
            part = raw[first:last, c]
            done = out[c, first:last]
            count = 0
            for i in range(part.shape[0]):
                a = rule.dtype.type(part[i, 0])
                b = rule.dtype.type(part[i, 1])
                done[i, 0] = (a - offset) * scale
                done[i, 1] = (b - offset) * scale
                count += (a <= low) | (a >= high) | (b <= low) | (b >= high)
            clipped[c] += count


@kernel
def convert_floats(
    raw: NDArray[Any], rule: NDArray[Any], out: NDArray[np.float32], invalid: NDArray[np.int64]
) -> None:
    """Raw * scale, split by channel; counts samples that are not finite in single precision.

    Args:
        raw: float32 or float64 in native byte order, shape (n, Nr, 2), C-contiguous.
        rule: the scale, shape (1,), type of raw.
        out: float32, shape (Nr, n, 2), C-contiguous; written.
        invalid: int64, shape (Nr,); added to.
    """
    frames, channels, _ = raw.shape
    scale = rule[0]
    for first in range(0, frames, _RUN):
        last = min(first + _RUN, frames)
        for c in range(channels):
            part = raw[first:last, c]
            done = out[c, first:last]
            count = 0
            for i in range(part.shape[0]):
                a = np.float32(part[i, 0] * scale)
                b = np.float32(part[i, 1] * scale)
                done[i, 0] = a
                done[i, 1] = b
                count += not (np.isfinite(a) and np.isfinite(b))
            invalid[c] += count
