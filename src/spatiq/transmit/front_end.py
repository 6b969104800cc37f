"""The receiver's front end as a list of impairments, applied to samples in the order of the list.

To add an impairment: one file with a frozen dataclass that has `begin`, and tests of its size
against a closed form. `begin` is called once per pass over the recording and returns the stage that
is given consecutive chunks (Nr, n) from sample 0 on, always cut at the same places, so a stage may
keep state. Random numbers come from `context.generator(first)`, never from anywhere else: then
samples depend on the seed alone. A stage may write into the chunk that it is given. Samples are in
the converter's scale throughout: full scale of I and of Q is 1.0.

Carrier and clock offsets are no stages: they belong to each frame's placement (carrier.py,
pulse_table.py).
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from spatiq.transmit.randomness import Purpose, generator

Samples = NDArray[np.complex64]
Stage = Callable[[Samples, int], Samples]


@dataclass(frozen=True)
class Context:
    """What a stage may know.

    Attributes:
        sample_rate: Hz.
        receive_channels: Nr.
        seed: seed of the simulation.
        place: position of the impairment in the list.
    """

    sample_rate: float
    receive_channels: int
    seed: int
    place: int

    def generator(self, first: int) -> np.random.Generator:
        """Random numbers of this impairment for the chunk that begins with sample `first`."""
        return generator(self.seed, Purpose.FRONT_END, self.place, first)


class Impairment(Protocol):
    """Something that the front end does to the samples."""

    def begin(self, context: Context) -> Stage:
        """A fresh stage: function of (chunk complex64 (Nr, n), index of its first sample)."""
        ...


def begin_all(
    impairments: Sequence[Impairment], sample_rate: float, receive_channels: int, seed: int
) -> list[Stage]:
    """Fresh stages of a whole front end, in order."""
    return [
        impairment.begin(Context(sample_rate, receive_channels, seed, place))
        for place, impairment in enumerate(impairments)
    ]
