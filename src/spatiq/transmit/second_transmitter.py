"""A second transmitter whose frames arrive among those of the first."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from spatiq.errors import InputError
from spatiq.transmit.carrier import Offset
from spatiq.transmit.channel import ChannelModel
from spatiq.transmit.moving_channel import Doppler
from spatiq.transmit.spacing import Spacing


@dataclass(frozen=True, eq=False, kw_only=True)
class OtherTransmitter:
    """Frames of the same link description from somewhere else.

    Noise, receive gains and delays, and the common phase are those of the simulation: the receiver
    is the same. All else is its own.

    Attributes:
        seed: seed of its channel, data bits, carrier and silences, 0 or more.
        delay: start of its first frame after that of the first transmitter, symbol periods; may be
            below 0.
        power_db: its power over the first transmitter's, at E|h|^2 = 1, dB.
        channels: as in `Scenario`; None: Rayleigh, independent for each frame.
        spacing: as in `Scenario`; None: as the first transmitter's.
        cfo_hz: as in `Scenario`.
        clock_ppm: as in `Scenario`.
        first_frame: number of its first frame.
        frames: how many; None: as many as the first transmitter sends. Those beyond the end of the
            recording are cut off.
    """

    seed: int = 1
    delay: float = 0.0
    power_db: float = 0.0
    channels: ChannelModel | Doppler | ArrayLike | None = None
    spacing: Spacing | None = None
    cfo_hz: Offset = 0.0
    clock_ppm: float = 0.0
    first_frame: int = 0
    frames: int | None = None

    def check(self) -> None:
        """Refuse delay and power out of range; the rest is refused where it is used."""
        if not abs(self.delay) < 1e9:
            raise InputError("other transmitter", "delay", self.delay, "within 1e9 symbol periods")
        if not -200.0 <= self.power_db <= 100.0:
            raise InputError("other transmitter", "power", self.power_db, "-200 to 100 dB")

    @property
    def amplitude(self) -> float:
        """Amplitude over the first transmitter's."""
        return float(np.float64(10.0) ** (self.power_db / 20))
