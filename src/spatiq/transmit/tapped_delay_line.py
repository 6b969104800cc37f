"""Tapped delay lines: rooms with echoes, of a delay profile and a delay spread."""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError
from spatiq.transmit.channel import Fading, Matrix, Mixing
from spatiq.transmit.delay_profiles import DelayProfile, delay_profile
from spatiq.transmit.echoes import Echoes
from spatiq.transmit.moving_channel import Doppler

LARGEST_SPREAD = 100.0
LARGEST_MATRICES = 100_000_000


@dataclass(frozen=True, eq=False)
class TappedDelayLine:
    """Independent Rayleigh paths of a delay profile; TDL-D with a line of sight at delay 0.

    Every path has its own matrix, with the correlation of `fading` over the antennas, and all have
    one mean power for all pairs of antennas; E of the sum over paths of |h|^2 is 1. Without
    `doppler` the channel stands still in each frame. With it, each path moves as in `Doppler`, and
    the line of sight stands still (the report gives it a Doppler shift of 0.7 of the largest, which
    would be a carrier offset here and belongs among those).

    Source: 3GPP TR 38.901 clause 7.7.2.

    Attributes:
        profile: name in `PROFILES`.
        delay_spread: rms delay spread, nominal symbol periods, above 0, up to 100.
        fading: correlation, form of the line of sight, `constant`; its K must be 0.
        doppler: largest Doppler shift, cycles per nominal symbol period; 0: none.
    """

    profile: str
    delay_spread: float
    fading: Fading = field(default_factory=Fading)
    doppler: float = 0.0

    def draw(
        self, rng: np.random.Generator, frames: int, receive: int, transmit: int, gain: Matrix
    ) -> Echoes:
        """A realisation for F frames.

        Args:
            rng: random numbers.
            frames, receive, transmit: F, Nr, Nt.
            gain: complex128 (Nr, 1); amplitude of each receive channel.

        Raises:
            InputError: unknown profile, spread out of range, fading that does not fit, or too many
                coefficients.
        """
        profile = delay_profile(self.profile)
        if not 0.0 < self.delay_spread <= LARGEST_SPREAD:
            expected = f"above 0, up to {LARGEST_SPREAD:g} symbol periods"
            raise InputError("channel", "delay spread", self.delay_spread, expected)
        if self.fading.k_factor:
            expected = "0: the profile says what its line of sight is"
            raise InputError("channel", "Rician K", self.fading.k_factor, expected)
        if self.doppler and self.fading.constant:
            raise InputError("channel", "Doppler", self.doppler, "0 beside a constant channel")
        delays, mixings = self._paths(profile, receive, transmit)
        if self.doppler:
            model = Doppler(self.doppler, self.fading)
            drawn = (model.field(rng, receive, transmit) for _ in mixings)
            fields = tuple(
                replace(each, mixing=mixing, gain=gain)
                for each, mixing in zip(drawn, mixings, strict=True)
            )
            return Echoes(delays, None, fields)
        most = LARGEST_MATRICES // (receive * transmit * len(mixings))
        if frames > most:
            expected = f"at most {most}: the channel matrices of all paths are kept for each"
            raise InputError("simulation", "frames", frames, expected)
        count = 1 if self.fading.constant else frames
        parts = rng.standard_normal((count, len(mixings), receive, transmit, 2)) * np.sqrt(0.5)
        scattered = parts[..., 0] + 1j * parts[..., 1]
        matrices = np.stack(
            [mixing.mixed(scattered[:, p]) for p, mixing in enumerate(mixings)], axis=1
        )
        matrices = np.broadcast_to(gain * matrices, (frames, *matrices.shape[1:]))
        return Echoes(delays, matrices)

    def _paths(
        self, profile: DelayProfile, receive: int, transmit: int
    ) -> tuple[NDArray[np.float64], list[Mixing]]:
        """Delay of each path, and how independent coefficients become its channel."""
        mixing = self.fading.mixing(receive, transmit)
        shares, direct_share = profile.shares
        paths = [replace(mixing, direct=None, scale=float(np.sqrt(share))) for share in shares]
        if direct_share:
            direct = replace(self.fading, k_factor=1.0).mixing(receive, transmit).direct
            assert direct is not None
            # Half of the power at K = 1 is direct.
            paths[0] = replace(paths[0], direct=direct * np.sqrt(2 * direct_share))
        return profile.delays * self.delay_spread, paths
