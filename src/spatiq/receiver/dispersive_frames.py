"""Frames received over a dispersive channel, as figures see them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from spatiq.receiver.dispersive_plan import DispersivePlan
from spatiq.receiver.fir_channel import Complex, Window, convolved


@dataclass(frozen=True, eq=False)
class DispersiveFrames:
    """What F frames left behind the matched filter, and the channel that explains it.

    Attributes:
        plan: the link.
        received: complex64 (F, K, Nr); carrier phase removed.
        taps: complex128 (F, L, Nr, Nt); zero at lags that the estimate left out.
        window: the lags.
        decided: int64 (F, Kp); decided words.
    """

    plan: DispersivePlan
    received: NDArray[np.complex64]
    taps: Complex
    window: Window
    decided: NDArray[np.int64]

    def unexplained(self, i: int, words: NDArray[np.int64]) -> Complex:
        """What words (Kp,) leave of frame i, at each word's place, over its amplitude: (Kp, Nr)."""
        plan = self.plan
        expected = convolved(plan.vectors(words), self.taps[i], self.window)
        left = np.asarray(self.received[i] - expected, np.complex128)
        return plan.at_words(left) / plan.amplitude[plan.payload, None]

    def channels_of_words(self, i: int) -> Complex:
        """Channel of frame i at each word's subcarrier, (Kp, Nr, Nt).

        Raises:
            ValueError: words that take no subcarriers.
        """
        found = self.plan.channels_of_words(self.taps[i], self.window)
        if found is None:
            raise ValueError("words take no subcarriers")
        return found

    def symbols(self, i: int, words: NDArray[np.int64], channel: Complex) -> NDArray[np.complex64]:
        """Payload vectors of frame i as a flat channel would have given them, (Kp, Nr).

        That is H x of each word and what the words do not explain of the vector received in its
        period, y[k] - sum over l of G[l] x[k - l], or at its subcarrier. Words of -1 are taken as
        decided.
        """
        plan = self.plan
        words = np.where(words < 0, self.decided[i], words)
        scaled = self.unexplained(i, words)
        flat = scaled + plan.codebook.vectors[words] @ channel.T
        return np.asarray(flat, np.complex64)


def flat_equivalent(taps: Complex) -> Complex:
    """H (Nr, Nt) with the energy of all taps (L, Nr, Nt), and the phase of the strongest."""
    energy = np.sum(np.abs(taps) ** 2, axis=0)
    strongest = np.argmax(np.abs(taps), axis=0)
    tap = np.take_along_axis(taps, strongest[None], axis=0)[0]
    size = np.abs(tap)
    phase = np.where(size > 0, tap / np.where(size > 0, size, 1.0), 1.0)
    return np.asarray(np.sqrt(energy) * phase, np.complex128)
