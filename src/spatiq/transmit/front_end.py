"""The receiver's front end as a list of impairments, applied to samples in the order of the list.

To add an impairment: one file with a frozen dataclass that has `begin`, and tests of its size
against a closed form. `begin` is called once per pass over the recording and returns the stage that
is given consecutive chunks (Nr, n) from sample 0 on, always cut at the same places, so a stage may
keep state. Random numbers come from `context.generator(first)`, never from anywhere else: then
samples depend on the seed alone. A stage may write into the chunk that it is given. Samples are in
the converter's scale throughout: full scale of I and of Q is 1.0.

What is no stage: carrier and clock offsets and delays belong to each frame's placement (carrier.py,
pulse_table.py, emission.py), common phase to the samples before noise (rotation.py), lost samples
to what is recorded (losses.py).
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import ArrayLike, NDArray

from spatiq.errors import InputError
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
        signal_power: expected |sample|^2 of payload at E|h|^2 = 1, in the samples' scale.
        noise_power: expected |sample|^2 of noise, mean over the receive channels.
    """

    sample_rate: float
    receive_channels: int
    seed: int
    place: int
    signal_power: float = 1.0
    noise_power: float = 0.0

    def generator(self, first: int) -> np.random.Generator:
        """Random numbers of this impairment for the chunk that begins with sample `first`."""
        return generator(self.seed, Purpose.FRONT_END, self.place, first)


class Impairment(Protocol):
    """Something that the front end does to the samples."""

    def begin(self, context: Context) -> Stage:
        """A fresh stage: function of (chunk complex64 (Nr, n), index of its first sample)."""
        ...


@dataclass(frozen=True, eq=False)
class InTurn:
    """Several impairments in one place, one after the other; they share its random numbers."""

    parts: Sequence[Impairment]

    def begin(self, context: Context) -> Stage:
        """The stage."""
        stages = [part.begin(context) for part in self.parts]

        def stage(samples: Samples, first: int) -> Samples:
            for each in stages:
                samples = each(samples, first)
            return samples

        return stage


def begin_all(
    impairments: Sequence[Impairment],
    sample_rate: float,
    receive_channels: int,
    seed: int,
    *,
    first_place: int = 0,
    signal_power: float = 1.0,
    noise_power: float = 0.0,
) -> list[Stage]:
    """Fresh stages of a whole front end, in order; places count from `first_place`."""
    return [
        impairment.begin(
            Context(sample_rate, receive_channels, seed, place, signal_power, noise_power)
        )
        for place, impairment in enumerate(impairments, first_place)
    ]


def per_channel(
    values: ArrayLike, receive_channels: int, source: str, field: str
) -> NDArray[np.complex128]:
    """One finite value for all receive channels, or one for each -> complex128 (Nr,).

    Raises:
        InputError: another number of values, or one that is not finite.
    """
    given = np.atleast_1d(np.asarray(values, np.complex128))
    if given.shape not in ((1,), (receive_channels,)):
        expected = f"one, or one for each of {receive_channels} receive channels"
        raise InputError(source, field, f"{given.size} values", expected)
    if not np.isfinite(given).all():
        raise InputError(source, field, "a value that is not finite", "finite numbers")
    return np.asarray(np.broadcast_to(given, (receive_channels,)))
