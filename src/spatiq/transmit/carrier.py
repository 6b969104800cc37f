"""Carrier and clock offsets: what a transmitter's reference does to every frame."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError

Offset = float | tuple[float, float]


@dataclass(frozen=True, eq=False)
class CarrierPlan:
    """Carrier of each frame: exp(j (phase + 2 pi cfo (n - start) / sample rate)).

    Attributes:
        cfo_hz: float64 (F,); offset of the received carrier.
        phase: float64 (F,); carrier phase at the frame's start, radians.
    """

    cfo_hz: NDArray[np.float64]
    phase: NDArray[np.float64]


def plan_carrier(
    cfo_hz: Offset, starts: NDArray[np.float64], sample_rate: float, rng: np.random.Generator
) -> CarrierPlan:
    """Offsets and phases of frames.

    Args:
        cfo_hz: one number: a steady carrier through the recording, phase 0 at sample 0. Two
            numbers: each frame has its own offset, uniform between them, and phase 0 at its start.
        starts: float64 (F,); frame starts in samples.
        sample_rate: Hz.
        rng: for the uniform draw.

    Raises:
        InputError: an offset beyond half the sample rate, or a range that runs backwards.
    """
    low, high = cfo_hz if isinstance(cfo_hz, tuple) else (cfo_hz, cfo_hz)
    limit = sample_rate / 2
    if not (np.isfinite([low, high]).all() and max(abs(low), abs(high)) < limit):
        raise InputError("carrier offset", "", cfo_hz, f"less than {limit:g} Hz either way")
    if low > high:
        raise InputError("carrier offset", "", cfo_hz, "the lower end of the range first")
    frames = len(starts)
    if isinstance(cfo_hz, tuple):
        return CarrierPlan(rng.uniform(low, high, frames), np.zeros(frames))
    turns = starts * (low / sample_rate)
    return CarrierPlan(np.full(frames, low), 2 * np.pi * (turns - np.floor(turns)))


def reference_offsets(reference_ppm: float, carrier_hz: float | None) -> tuple[float, float]:
    """Carrier offset in Hz and lengthening of the symbol period in ppm, both from one reference.

    A transmitter whose reference runs fast by p has its carrier high by p and its symbol period
    shortened to 1 / (1 + p).

    Raises:
        InputError: the link states no carrier frequency, or the offset is not within 1000 ppm.
    """
    if carrier_hz is None:
        raise InputError(
            "reference offset", "air.carrier_hz", "none", "a link description with carrier_hz"
        )
    if not abs(reference_ppm) <= 1000.0:
        raise InputError("reference offset", "", reference_ppm, "at most 1000 ppm either way")
    fraction = reference_ppm * 1e-6
    return fraction * carrier_hz, -reference_ppm / (1 + fraction)
