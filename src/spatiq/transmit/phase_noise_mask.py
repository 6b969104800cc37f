"""Phase noise by its spectrum: a mask of offsets from the carrier and levels in dBc/Hz."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.fft import irfft, next_fast_len, rfft

from spatiq.errors import InputError
from spatiq.transmit.front_end import Context
from spatiq.transmit.rotation import Angles, Turning

# Bins of the filter below the mask's first offset, and the longest filter.
BINS_BELOW = 8
LONGEST_FILTER = 1 << 21
HISTORY_KEY = 1 << 62


@dataclass(frozen=True)
class PhaseNoiseMask:
    """Stationary Gaussian phase noise whose spectral density follows a mask.

    L(f) in dBc/Hz is half the one-sided, and so the two-sided, density of the phase in rad^2/Hz
    (IEEE Std 1139, definition of L(f); from memory). Between points L runs straight over log f;
    below the first and above the last point it keeps their levels. Made by filtering white noise
    with a zero-phase FIR filter whose bins lie on the root of the density.

    Attributes:
        points: (offset in Hz, dBc/Hz), offsets ascending and above 0; one point is a flat density.
    """

    points: Sequence[tuple[float, float]]

    def density(self, offset_hz: ArrayLike) -> NDArray[np.float64]:
        """Two-sided density of the phase, rad^2/Hz, at offsets of either sign.

        Raises:
            InputError: a mask without points, out of order, or with levels above 0 dBc/Hz.
        """
        places = np.array([place for place, _ in self.points], np.float64)
        levels = np.array([level for _, level in self.points], np.float64)
        ordered = len(places) > 0 and places[0] > 0 and bool(np.all(np.diff(places) > 0))
        if not ordered or not np.isfinite(places).all():
            expected = "one or more offsets in Hz, above 0 and ascending"
            raise InputError("phase noise", "mask", self.points, expected)
        if not np.all((levels >= -300) & (levels <= 0)):
            raise InputError("phase noise", "mask", self.points, "levels of -300 to 0 dBc/Hz")
        offsets = np.maximum(np.abs(np.asarray(offset_hz, np.float64)), places[0])
        return np.asarray(10 ** (np.interp(np.log(offsets), np.log(places), levels) / 10))

    def taps(self, sample_rate: float) -> NDArray[np.float64]:
        """Filter from unit white noise to the phase, float64 (odd,), symmetric.

        Raises:
            InputError: a first offset too small a part of the sample rate, or a last one beyond
                half of it.
        """
        self.density(1.0)
        lowest, highest = self.points[0][0], self.points[-1][0]
        if highest > sample_rate / 2:
            expected = f"offsets up to half the sample rate, {sample_rate / 2:g} Hz"
            raise InputError("phase noise", "mask", f"{highest:g} Hz", expected)
        size = 256
        while len(self.points) > 1 and size < BINS_BELOW * sample_rate / lowest:
            size *= 2
        if size > LONGEST_FILTER:
            expected = f"offsets from {BINS_BELOW * sample_rate / LONGEST_FILTER:g} Hz up"
            raise InputError("phase noise", "mask", f"{lowest:g} Hz", expected)
        bins = np.arange(size // 2 + 1) * (sample_rate / size)
        response = irfft(np.sqrt(self.density(bins) * sample_rate), size)
        # The last tap of an even filter stands at both ends: half of it at each keeps symmetry.
        taps = np.concatenate([response[size // 2 :], response[: size // 2 + 1]])
        taps[0] *= 0.5
        taps[-1] *= 0.5
        return np.asarray(taps, np.float64)

    def begin(self, context: Context) -> Turning:
        """The phase: overlap-save convolution; memory is that of the filter."""
        taps = self.taps(context.sample_rate)
        history = context.generator(HISTORY_KEY).standard_normal(len(taps) - 1)

        def angles(first: int, count: int) -> Angles:
            nonlocal history
            fresh = context.generator(first).standard_normal(count)
            driven = np.concatenate([history, fresh])
            history = driven[count:]
            size = next_fast_len(len(driven), real=True)
            filtered = irfft(rfft(driven, size) * rfft(taps, size), size)
            return np.asarray(filtered[len(taps) - 1 : len(driven)], np.float64)

        return angles
