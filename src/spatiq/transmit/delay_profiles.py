"""Delay profiles of rooms and streets, as tables: delay over rms delay spread, and power.

Source: 3GPP TR 38.901 clause 7.7.2, tapped delay lines TDL-A, TDL-C and TDL-D (from memory; A and C
agree with several published copies, D with two, and the rms delays are checked in the tests). TDL-B
and TDL-E are left out: no text of theirs could be vouched for.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError


@dataclass(frozen=True)
class DelayProfile:
    """Paths of a tapped delay line.

    Attributes:
        name: as the report has it.
        paths: (delay over rms delay spread, power in dB) of each fading path.
        line_of_sight_db: power of a path at delay 0 that does not fade, dB; None: there is none.
    """

    name: str
    paths: tuple[tuple[float, float], ...]
    line_of_sight_db: float | None = None

    @property
    def delays(self) -> NDArray[np.float64]:
        """Delay of each fading path over the rms delay spread, (P,)."""
        return np.array([delay for delay, _ in self.paths])

    @property
    def shares(self) -> tuple[NDArray[np.float64], float]:
        """Share of the mean power of each fading path (P,), and of the line of sight."""
        fading = 10 ** (np.array([power for _, power in self.paths]) / 10)
        direct = 0.0 if self.line_of_sight_db is None else 10 ** (self.line_of_sight_db / 10)
        total = float(fading.sum()) + direct
        return fading / total, direct / total

    @property
    def rms_delay(self) -> float:
        """Root mean square delay over the rms delay spread, line of sight included: about 1."""
        fading, _ = self.shares
        mean = float(np.sum(fading * self.delays))
        return float(np.sqrt(np.sum(fading * self.delays**2) - mean**2))


_A = (
    *((0.0, -13.4), (0.3819, 0.0), (0.4025, -2.2), (0.5868, -4.0), (0.4610, -6.0)),
    *((0.5375, -8.2), (0.6708, -9.9), (0.5750, -10.5), (0.7618, -7.5), (1.5375, -15.9)),
    *((1.8978, -6.6), (2.2242, -16.7), (2.1718, -12.4), (2.4942, -15.2), (2.5119, -10.8)),
    *((3.0582, -11.3), (4.0810, -12.7), (4.4579, -16.2), (4.5695, -18.3), (4.7966, -18.9)),
    *((5.0066, -16.6), (5.3043, -19.9), (9.6586, -29.7)),
)
_C = (
    *((0.0, -4.4), (0.2099, -1.2), (0.2219, -3.5), (0.2329, -5.2), (0.2176, -2.5)),
    *((0.6366, 0.0), (0.6448, -2.2), (0.6560, -3.9), (0.6584, -7.4), (0.7935, -7.1)),
    *((0.8213, -10.7), (0.9336, -11.1), (1.2285, -5.1), (1.3083, -6.8), (2.1704, -8.7)),
    *((2.7105, -13.2), (4.2589, -13.9), (4.6003, -13.9), (5.4902, -15.8), (5.6077, -17.1)),
    *((6.3065, -16.0), (6.6374, -15.7), (7.0427, -21.6), (8.6523, -22.8)),
)
_D = (
    *((0.0, -13.5), (0.035, -18.8), (0.612, -21.0), (1.363, -22.8), (1.405, -17.9)),
    *((1.804, -20.1), (2.596, -21.9), (1.775, -22.9), (4.042, -27.8), (7.937, -23.6)),
    *((9.424, -24.8), (9.708, -30.0), (12.525, -27.7)),
)

PROFILES: dict[str, DelayProfile] = {
    "tdl-a": DelayProfile("TDL-A", _A),
    "tdl-c": DelayProfile("TDL-C", _C),
    "tdl-d": DelayProfile("TDL-D", _D, line_of_sight_db=-0.2),
}


def delay_profile(name: str) -> DelayProfile:
    """A profile by name.

    Raises:
        InputError: no such profile.
    """
    if name not in PROFILES:
        raise InputError("channel", "delay profile", repr(name), ", ".join(PROFILES))
    return PROFILES[name]
