"""What turns the carrier's phase through a recording, on all receive channels alike.

To add one: a frozen dataclass with `begin` that returns a function of (first sample, count) giving
phases in radians; it is called for consecutive chunks from sample 0 on. All are applied to the
frames before interference and noise: transmitter and receiver oscillator count together.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError
from spatiq.transmit.front_end import Context, Samples, Stage
from spatiq.transmit.shaping import CHUNK

Angles = NDArray[np.float64]
Turning = Callable[[int, int], Angles]
# Rotations draw from places of their own: those of the front end count from 0.
FIRST_PLACE = 2000


class Rotation(Protocol):
    """Carrier phase through a recording."""

    def begin(self, context: Context) -> Turning:
        """A fresh function of (first, count) -> radians, float64 (count,)."""
        ...


@dataclass(frozen=True)
class CarrierDrift:
    """A carrier offset that grows steadily: phase pi rate t^2, 0 at the first sample.

    Attributes:
        rate_hz_per_s: Hz per second.
    """

    rate_hz_per_s: float

    def begin(self, context: Context) -> Turning:
        """The phase; raises InputError for a rate that is not finite or beyond the sample rate."""
        if not abs(self.rate_hz_per_s) <= context.sample_rate**2:
            found = self.rate_hz_per_s
            raise InputError("carrier drift", "", found, "a finite number of Hz per second")

        def angles(first: int, count: int) -> Angles:
            seconds = (first + np.arange(count)) / context.sample_rate
            turns = 0.5 * self.rate_hz_per_s * seconds**2
            return np.asarray(2 * np.pi * (turns - np.floor(turns)), np.float64)

        return angles


@dataclass(frozen=True)
class WienerPhaseNoise:
    """Phase noise of a free-running oscillator: Brownian motion, 0 at the first sample.

    The phase moves by a Gaussian of variance 2 pi linewidth t in time t; the line is Lorentzian,
    `linewidth` wide between its half-power points. A. Demir, A. Mehrotra, J. Roychowdhury, "Phase
    noise in oscillators", IEEE Trans. Circuits Syst. I 47(5), 2000 (from memory).

    Attributes:
        linewidth_hz: full width at half power.
    """

    linewidth_hz: float

    def begin(self, context: Context) -> Turning:
        """The phase; raises InputError for a linewidth out of range."""
        if not 0.0 <= self.linewidth_hz <= context.sample_rate:
            expected = f"0 to {context.sample_rate:g} Hz"
            raise InputError("phase noise", "linewidth", self.linewidth_hz, expected)
        deviation = np.sqrt(2 * np.pi * self.linewidth_hz / context.sample_rate)
        reached = 0.0

        def angles(first: int, count: int) -> Angles:
            nonlocal reached
            steps = deviation * context.generator(first).standard_normal(count)
            phase = reached + np.cumsum(steps) - steps[0] * (first == 0)
            reached = float(phase[-1])
            return np.asarray(phase, np.float64)

        return angles


@dataclass(frozen=True, eq=False)
class Rotated:
    """Turns all receive channels by the sum of some rotations."""

    rotations: Sequence[Rotation]

    def begin(self, context: Context) -> Stage:
        """The stage."""
        turning = total_turning(self.rotations, context)

        def stage(samples: Samples, first: int) -> Samples:
            angles = turning(first, samples.shape[1])
            samples *= np.exp(1j * angles).astype(np.complex64)
            return samples

        return stage


def total_turning(rotations: Sequence[Rotation], context: Context) -> Turning:
    """The sum of rotations, each with random numbers of its own."""
    each = [
        rotation.begin(Context(context.sample_rate, context.receive_channels, context.seed, place))
        for place, rotation in enumerate(rotations, FIRST_PLACE)
    ]

    def angles(first: int, count: int) -> Angles:
        total = np.zeros(count)
        for turning in each:
            total += turning(first, count)
        return total

    return angles


def phase_chunks(
    rotations: Sequence[Rotation], sample_rate: float, seed: int, n_samples: int
) -> Iterator[Angles]:
    """Sum of rotations at samples 0..n_samples-1, radians, in chunks of at most `CHUNK`."""
    turning = total_turning(rotations, Context(sample_rate, 1, seed, FIRST_PLACE))
    for first in range(0, n_samples, CHUNK):
        yield turning(first, min(CHUNK, n_samples - first))
