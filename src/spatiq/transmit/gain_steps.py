"""Gain that steps: a front end whose gain control switches between frames or within them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError
from spatiq.transmit.front_end import Context, Samples, Stage


@dataclass(frozen=True)
class GainPlan:
    """When the gain switches and to what, by frame.

    Attributes:
        steps: (place, dB): from there on the gain is higher by so many dB. The place is the number
            of a frame of the recording, counted from 0, plus the share of it that has passed: 2.5
            is the middle of frame 2; 2 is ahead of its first pulse.
        each_frame_db: half the range from which each frame draws a gain of its own (uniform in dB,
            switched ahead of its first pulse); 0: none.
    """

    steps: Sequence[tuple[float, float]] = ()
    each_frame_db: float = 0.0

    def placed(
        self,
        starts: NDArray[np.float64],
        length: float,
        reach: float,
        rng: np.random.Generator,
    ) -> GainSteps:
        """The plan on the sampling clock.

        Args:
            starts: float64 (F,); instants of the frames' first symbols.
            length: samples per frame.
            reach: half length of a pulse, samples.
            rng: for the frames' own gains.

        Raises:
            InputError: a place outside the frames, or a step of more than 100 dB.
        """
        if not 0.0 <= self.each_frame_db <= 50.0:
            raise InputError("gain", "of each frame", self.each_frame_db, "0 to 50 dB")
        ahead = starts - reach
        own = rng.uniform(-1.0, 1.0, len(starts)) * self.each_frame_db
        changes: list[tuple[float, float]] = []
        if self.each_frame_db:
            switched = np.diff(own, prepend=0.0)
            changes = list(zip(ahead.tolist(), switched.tolist(), strict=True))
        for place, change in self.steps:
            if not 0.0 <= place < len(starts):
                raise InputError("gain", "place", place, f"0 to below {len(starts)} frames")
            if not abs(change) <= 100.0:
                raise InputError("gain", "step", change, "at most 100 dB either way")
            frame = int(place)
            share = place - frame
            at = starts[frame] + share * length if share else ahead[frame]
            changes.append((float(at), float(change)))
        changes.sort(key=lambda item: item[0])
        places = np.ceil([place for place, _ in changes])
        levels = np.cumsum([change for _, change in changes])
        return GainSteps(places.astype(np.int64), np.asarray(10 ** (levels / 20), np.float64))


@dataclass(frozen=True, eq=False)
class GainSteps:
    """Multiplies all receive channels by a gain that is constant between places.

    Attributes:
        places: int64 (S,), ascending; samples from which the factors hold. Before the first one the
            gain is 1.
        factors: float64 (S,); amplitude factors.
    """

    places: NDArray[np.int64]
    factors: NDArray[np.float64]

    def at(self, samples: NDArray[np.int64]) -> NDArray[np.float64]:
        """Amplitude factor at sample numbers, int64 of any shape."""
        if not len(self.places):
            return np.ones(np.shape(samples))
        passed = np.searchsorted(self.places, samples, "right")
        return np.where(passed > 0, self.factors[np.maximum(passed - 1, 0)], 1.0)

    def begin(self, context: Context) -> Stage:
        """The stage."""

        def stage(samples: Samples, first: int) -> Samples:
            samples *= self.at(first + np.arange(samples.shape[1])).astype(np.float32)
            return samples

        return stage
