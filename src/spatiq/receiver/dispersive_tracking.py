"""First look at the payload of a dispersive frame: words and carrier phase, block by block.

Each block of words is decided as a sequence with the carrier as known so far, a little beyond its
end; what the words leave of the phase then corrects carrier and phase for the next block (Kalman
filter of phase and carrier, e.g. B. D. O. Anderson and J. B. Moore, "Optimal Filtering", ch. 6).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from spatiq.receiver.dispersive_acquisition import KnownSymbolFit
from spatiq.receiver.dispersive_plan import DispersivePlan
from spatiq.receiver.fir_channel import Complex, Window, convolved

BLOCK = 48

# Words of a run of periods: (received, taps, window, noise, amplitude, heard) -> int64 (N,).
RunDetector = Callable[
    [Complex, Complex, Window, float, NDArray[np.float64], NDArray[np.bool_] | None],
    NDArray[np.int64],
]


@dataclass
class CarrierTrack:
    """Phase (radians) and carrier (radians per period) at a period, and their covariance."""

    at: float
    state: NDArray[np.float64]
    covariance: NDArray[np.float64]
    walk: float

    @classmethod
    def begin(cls, fit: KnownSymbolFit, plan: DispersivePlan, walk: float) -> CarrierTrack:
        """As the known symbols leave it; walk: variance of the phase's walk per period."""
        energy = float(np.sum(np.abs(fit.channel.taps) ** 2)) * plan.rows.size
        noise = fit.channel.noise
        start = np.diag([noise / max(2 * energy, noise * 1e-6), fit.variance])
        return cls(plan.centre, np.zeros(2), start, walk)

    def advance(self, to: float) -> None:
        """Predict."""
        distance = to - self.at
        move = np.array([[1.0, distance], [0.0, 1.0]])
        self.state = move @ self.state
        self.covariance = np.asarray(move @ self.covariance @ move.T, np.float64)
        self.covariance[0, 0] += self.walk * abs(distance)
        self.at = to

    def phases(self, periods: NDArray[np.int64]) -> NDArray[np.float64]:
        """Predicted phase at some periods."""
        return np.asarray(self.state[0] + self.state[1] * (periods - self.at), np.float64)

    def observe(
        self, periods: NDArray[np.int64], error: Complex, reference: Complex, noise: float
    ) -> None:
        """Take in vectors received, turned by the prediction, against their reference (n, Nr)."""
        k = periods - self.at
        score = np.sum((reference.conj() * error).imag, axis=1)
        weight = np.sum(np.abs(reference) ** 2, axis=1)
        gain = 2.0 / noise
        information = gain * np.array(
            [[weight.sum(), weight @ k], [weight @ k, weight @ (k * k)]], np.float64
        )
        inverse = np.linalg.inv(np.linalg.inv(self.covariance) + information)
        self.covariance = np.asarray(inverse, np.float64)
        self.state = self.state + self.covariance @ (gain * np.array([score.sum(), score @ k]))


def track_frame(
    received: Complex,
    fit: KnownSymbolFit,
    plan: DispersivePlan,
    detect: RunDetector,
    walk: float,
) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    """Words and carrier phase of a frame.

    Periods ahead of the first known symbols take the carrier as these tell it.

    Args:
        received: complex128 (K, Nr); the fit's carrier taken out.
        fit: of the known symbols.
        plan: the link.
        detect: sequence detector or linear equaliser.
        walk: variance of the phase's random walk per period.

    Returns:
        Words int64 (K,), -1 where none is sent; phase float64 (K,), radians.
    """
    channel, periods = fit.channel, plan.amplitude.size
    window, noise = channel.window, channel.noise
    carrier = CarrierTrack.begin(fit, plan, walk)
    words = np.full(periods, -1, np.int64)
    phase = carrier.phases(np.arange(periods))
    vectors = plan.known.copy()
    for begin, end in _blocks(plan):
        stop = min(end + 2 * window.memory + 8, periods)
        first = max(begin + window.first, 0)
        run = np.arange(first, stop)
        if begin > plan.rows[0]:
            carrier.advance(float(begin))
            phase[first:] = carrier.phases(np.arange(first, periods))
        turned = received[run] * np.exp(-1j * phase[run])[:, None]
        around = convolved(vectors, channel.taps, window)
        amplitude = np.where(run >= begin, plan.amplitude[run], 0.0)
        # The last vectors also hold symbols from beyond the run, where these are not known.
        heard = (run < stop + window.first) | (stop == periods)
        found = detect(turned - around[run], channel.taps, window, noise, amplitude, heard)
        words[run] = np.where(found >= 0, found, words[run])
        sent = plan.codebook.vectors[np.maximum(found, 0)] * amplitude[:, None]
        vectors[run] += sent
        if begin > plan.rows[0]:
            seen = np.arange(begin, end)
            reference = convolved(vectors, channel.taps, window)[seen]
            carrier.observe(seen, turned[seen - first], reference, noise)
            phase[begin:] = carrier.phases(np.arange(begin, periods))
        # What lies beyond the block is decided anew with the next one.
        vectors[end:] = plan.known[end:]
        words[end:] = -1
    return words, phase


def _blocks(plan: DispersivePlan) -> list[tuple[int, int]]:
    """Blocks of periods that hold payload, ascending."""
    found: list[tuple[int, int]] = []
    begin = 0
    while True:
        ahead = np.flatnonzero(plan.amplitude[begin:])
        if not ahead.size:
            return found
        begin += int(ahead[0])
        end = min(begin + BLOCK, plan.amplitude.size)
        found.append((begin, end))
        begin = end
