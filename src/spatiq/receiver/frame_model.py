"""One frame as part of it says it should go on: received vectors and their likelihoods."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from spatiq.receiver.frame_batch import FrameBatch
from spatiq.receiver.link_tables import LinkTables
from spatiq.receiver.matched_filter import FilterBank, sample_periods

Floats = NDArray[np.float64]
Complex = NDArray[np.complex128]


@dataclass(frozen=True, eq=False)
class FrameModel:
    """Timing, phase line, channel and noise of a frame; likelihoods are natural logarithms.

    Attributes:
        planes: float32 (Nr, 2, W); samples.
        t0, step: samples.
        line: phase at period 0 and per period, radians.
        points: complex128 (C, Nr); H x[c].
        known: complex128 (Ka, Nr); H x of the known periods, zero at payload.
        noise: N0.
        tables, bank: as in the stages.
        phase_var, timing_var: variances of phase (radians^2) and timing (samples^2) in the middle
            of the fitted part, a period; `rate_var`, `step_var`: of their growth per period.
        middle: that period.
    """

    planes: NDArray[np.float32]
    t0: float
    step: float
    line: tuple[float, float]
    points: Complex
    known: Complex
    noise: float
    tables: LinkTables
    bank: FilterBank
    phase_var: float
    rate_var: float
    timing_var: float
    step_var: float
    middle: float

    @property
    def signal(self) -> float:
        """Mean power of H x per channel."""
        return float(np.mean(np.abs(self.points) ** 2))

    def phase_at(self, period: float) -> float:
        """Carrier phase expected at a period, radians."""
        return self.line[0] + self.line[1] * period

    def spread_at(self, period: float) -> tuple[float, float]:
        """Variances of the phase and the timing expected at a period."""
        away = (period - self.middle) ** 2
        return self.phase_var + self.rate_var * away, self.timing_var + self.step_var * away

    def outputs(self, periods: NDArray[np.int64], late: float = 0.0) -> Complex:
        """Filter outputs (n, Nr) of periods, `late` samples after their time, phase removed."""
        out = np.empty((periods.size, 2, self.planes.shape[0]), np.float32)
        bank = self.bank
        sample_periods(self.planes, self.t0 + late, self.step, periods, bank.taps, bank.phases, out)
        turn = np.exp(-1j * (self.line[0] + self.line[1] * periods))
        return np.asarray((out[:, 0] + 1j * out[:, 1]) * turn[:, None], np.complex128)

    def mixture(self, y: Complex, amplitude: Floats | float = 1.0) -> Floats:
        """Of vectors (..., n, Nr) when each is the likeliest of the codewords."""
        amplitude = np.broadcast_to(np.asarray(amplitude, np.float64), y.shape[:-1])
        near = 2.0 * np.real(y @ self.points.conj().T) * amplitude[..., None]
        near -= np.sum(np.abs(self.points) ** 2, axis=1) * amplitude[..., None] ** 2
        power = np.sum(np.abs(y) ** 2, axis=-1)
        likeliest = (near.max(axis=-1) - power) / self.noise
        return np.asarray(likeliest - self._density(y, len(self.points)))

    def sent(self, y: Complex, vectors: Complex) -> Floats:
        """Of vectors (n, Nr) when H x is known."""
        distance = np.sum(np.abs(y - vectors) ** 2, axis=-1)
        return np.asarray(-distance / self.noise - self._density(y))

    def silent(self, y: Complex) -> Floats:
        """Of vectors when nothing is sent."""
        return self.sent(y, np.zeros_like(y))

    def unknown(self, y: Complex) -> Floats:
        """Of vectors when a signal of the usual power, but unknown, is sent."""
        level = self.noise + self.signal
        power = np.sum(np.abs(y) ** 2, axis=-1)
        return np.asarray(-power / level - y.shape[-1] * np.log(np.pi * level))

    def _density(self, y: Complex, choices: int = 1) -> float:
        return float(y.shape[-1] * np.log(np.pi * self.noise) + np.log(choices))

    def as_sent(self, at: NDArray[np.int64], y: Complex) -> Floats:
        """Of vectors y (n, Nr) of active periods (indices): payload or known symbol, as it is."""
        payload = self.tables.active_word[at] >= 0
        amplitude = self.tables.active_amplitude[at].astype(np.float64)
        return np.where(payload, self.mixture(y, amplitude), self.sent(y, self.known[at]))


def model_of(
    one: FrameBatch, kept: NDArray[np.bool_], tables: LinkTables, bank: FilterBank
) -> FrameModel:
    """The model that a fitted part says.

    Args:
        one: batch of one frame, all periods.
        kept: bool (Ka,); periods that were fitted.
        tables: of the whole frame.
        bank: filter bank.
    """
    channel, noise = one.channel[0], float(one.noise[0])
    points = tables.codebook.vectors @ channel.T
    noise = max(noise, 1e-6 * float(np.mean(np.abs(points) ** 2)), 1e-30)
    fitted = np.flatnonzero(kept)
    periods = tables.active[fitted].astype(np.float64)
    phase = one.phase[0, fitted].astype(np.float64)
    slope, start = np.polyfit(periods, phase, 1) if fitted.size > 1 else (0.0, phase[0])
    power = float(np.mean(np.sum(np.abs(points) ** 2, axis=1)))
    information = 2.0 * power * max(fitted.size, 1) / noise
    middle = float(periods.mean())
    spread = max(float(np.mean((periods - middle) ** 2)), 1.0)
    return FrameModel(
        planes=one.planes[0],
        t0=float(one.t0[0]),
        step=float(one.step[0]),
        line=(float(start), float(slope)),
        points=points,
        known=tables.known_vectors.astype(np.complex128) @ channel.T,
        noise=noise,
        tables=tables,
        bank=bank,
        phase_var=1.0 / information,
        rate_var=1.0 / (information * spread),
        timing_var=1.0 / (information * bank.slope_energy),
        step_var=min(float(one.step_var[0]), 1.0 / (information * bank.slope_energy * spread)),
        middle=middle,
    )
