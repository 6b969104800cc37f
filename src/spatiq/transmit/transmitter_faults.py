"""Faults of a transmitter, as changes of the vectors that it sends; for a prototype gone wrong.

They act on the symbols, in the order given, before the pulse: what an antenna switch does within a
symbol period is so exact for a rectangular pulse, for others its share of the period's energy. A
transmitter that follows another description needs no fault: simulate with that description.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError
from spatiq.link.layout import FrameLayout, Period
from spatiq.transmit.iq_imbalance import imbalance_coefficients

Vectors = NDArray[np.complex128]


class TransmitterFault(Protocol):
    """Something that is wrong with a transmitter."""

    def __call__(self, vectors: Vectors, layout: FrameLayout) -> Vectors:
        """Vectors (F, K, Nt) as they should be -> as they are sent."""
        ...


@dataclass(frozen=True)
class Permuted:
    """Antenna ports wired otherwise for payload than for the rest.

    Attributes:
        order: antenna order[a] sends the payload meant for antenna a.
    """

    order: tuple[int, ...]

    def __call__(self, vectors: Vectors, layout: FrameLayout) -> Vectors:
        """Payload columns in another order."""
        if sorted(self.order) != list(range(vectors.shape[2])):
            expected = f"a permutation of 0 to {vectors.shape[2] - 1}"
            raise InputError("transmitter fault", "order", self.order, expected)
        out = vectors.copy()
        payload = layout.kind == Period.PAYLOAD
        for a, port in enumerate(self.order):
            out[:, payload, port] = vectors[:, payload, a]
        return out


@dataclass(frozen=True)
class PortLevel:
    """An antenna that is weak, or dead (-inf dB)."""

    antenna: int
    level_db: float

    def __call__(self, vectors: Vectors, layout: FrameLayout) -> Vectors:
        """One column scaled."""
        out = vectors.copy()
        out[:, :, self.antenna] *= 10 ** (self.level_db / 20)
        return out


@dataclass(frozen=True)
class StuckOn:
    """An antenna that sends whatever any of them sends, at a level below what it should."""

    antenna: int
    level_db: float = 0.0

    def __call__(self, vectors: Vectors, layout: FrameLayout) -> Vectors:
        """Others' symbols on top of its own."""
        out = vectors.copy()
        others = vectors.sum(axis=2) - vectors[:, :, self.antenna]
        out[:, :, self.antenna] += others * 10 ** (self.level_db / 20)
        return out


@dataclass(frozen=True)
class LateSwitch:
    """After a change of antenna, the antenna before keeps sending for a share of the period."""

    share: float

    def __call__(self, vectors: Vectors, layout: FrameLayout) -> Vectors:
        """Part of each symbol on the antenna of the period before."""
        if not 0 <= self.share <= 1:
            raise InputError("transmitter fault", "share", self.share, "0 to 1 symbol period")
        out = vectors.copy()
        on = np.abs(vectors) > 0
        count = on.sum(axis=2)
        single = (count[:, 1:] == 1) & (count[:, :-1] == 1)
        before, now = on[:, :-1].argmax(axis=2), on[:, 1:].argmax(axis=2)
        f, k = np.nonzero(single & (before != now))
        symbol = vectors[f, k + 1, now[f, k]]
        out[f, k + 1, now[f, k]] = (1 - self.share) * symbol
        out[f, k + 1, before[f, k]] = self.share * symbol
        return out


@dataclass(frozen=True)
class Modulator:
    """IQ imbalance and carrier leakage of the paths of some antennas, while they send.

    Attributes:
        antennas: which.
        gain_db: gain of Q over I.
        phase_deg: departure from quadrature.
        leakage_db: carrier over unit symbol power; -inf: none.
        angle_deg: of the leakage.
    """

    antennas: Sequence[int]
    gain_db: float = 0.0
    phase_deg: float = 0.0
    leakage_db: float = -np.inf
    angle_deg: float = 30.0

    def __call__(self, vectors: Vectors, layout: FrameLayout) -> Vectors:
        """Image and constant added to the symbols."""
        out = vectors.copy()
        direct, image = imbalance_coefficients(self.gain_db, self.phase_deg)
        constant = 10 ** (self.leakage_db / 20) * np.exp(1j * np.radians(self.angle_deg))
        for a in self.antennas:
            s = vectors[:, :, a]
            out[:, :, a] = direct * s + image * s.conj() + constant * (s != 0)
        return out


@dataclass(frozen=True)
class Droop:
    """Power that falls or rises along the frame, linearly in amplitude.

    Attributes:
        end_db: power of the last period over that of the first.
    """

    end_db: float

    def __call__(self, vectors: Vectors, layout: FrameLayout) -> Vectors:
        """All antennas scaled along the frame."""
        course = np.linspace(1.0, 10 ** (self.end_db / 20), vectors.shape[1])
        return np.asarray(vectors * course[None, :, None])
