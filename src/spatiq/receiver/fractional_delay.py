"""Moving each receive channel's samples in time by any fraction of a sample.

A band-limited signal is moved exactly by a phase that grows with frequency; whole samples are moved
as they are, so that only the fraction's tails meet the window's ends.
"""

from __future__ import annotations

import numpy as np
import scipy.fft
from numpy.typing import NDArray


def advanced(planes: NDArray[np.float32], delays: NDArray[np.float64]) -> NDArray[np.float32]:
    """Samples with each channel's delay taken out.

    Args:
        planes: float32 (Nr, 2, W).
        delays: float64 (Nr,); samples, positive where a channel is late.

    Returns:
        float32 (Nr, 2, W); what is moved in from outside the window is zero.
    """
    channels, _, count = planes.shape
    moved = np.zeros_like(planes)
    length = scipy.fft.next_fast_len(count + 2 * _MARGIN)
    frequency = scipy.fft.fftfreq(length)
    for r in range(channels):
        whole = int(np.round(delays[r]))
        samples = np.zeros(length, np.complex128)
        into, out_of = slice(max(-whole, 0), count - max(whole, 0)), max(whole, 0)
        taken = slice(out_of, out_of + into.stop - into.start)
        samples[into] = planes[r, 0, taken] + 1j * planes[r, 1, taken]
        if delays[r] == whole:
            moved[r, 0, into], moved[r, 1, into] = planes[r, 0, taken], planes[r, 1, taken]
            continue
        turn = np.exp(2j * np.pi * frequency * (delays[r] - whole))
        fine = scipy.fft.ifft(scipy.fft.fft(samples) * turn)[:count]
        moved[r, 0], moved[r, 1] = fine.real, fine.imag
    return moved


_MARGIN = 64  # zeros between the window's ends, which the transform takes for neighbours
