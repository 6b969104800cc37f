"""Acquisition on a dispersive channel: carrier and impulse responses from known symbols together.

Maximum likelihood over the carrier with the channel concentrated out: what is left of the received
vectors after projection on all that the known symbols could have made of them (M. Morelli and U.
Mengali, "Carrier-frequency estimation for transmissions over selective channels", IEEE Trans.
Commun. 48(9), 2000). Timing is that of the strongest correlation with a flat channel: what it is
off by is part of the impulse response.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.optimize
from numpy.typing import NDArray

from spatiq.receiver.dispersive_plan import DispersivePlan
from spatiq.receiver.fir_channel import Complex, FirChannel, FirFit, Window
from spatiq.receiver.matched_filter import FilterBank, sample_periods

# Grid of carriers to either side, in units of one over the known symbols' span, and its fineness.
_REACH, _STEPS = 1.5, 8


@dataclass(frozen=True, eq=False)
class KnownSymbolFit:
    """Carrier and channel of a frame from its known symbols.

    Attributes:
        carrier: cycles per symbol period, left in what was given.
        variance: of the carrier, (radians per symbol period)^2.
        channel: impulse responses; phase at `DispersivePlan.centre`.
    """

    carrier: float
    variance: float
    channel: FirChannel


class KnownSymbols:
    """Fits frames of one plan."""

    def __init__(self, plan: DispersivePlan) -> None:
        """Derive what all frames share."""
        self._plan = plan
        self._offset = plan.rows - plan.centre
        span = float(plan.rows[-1] - plan.rows[0]) + 1.0
        self._grid = np.arange(-_REACH * _STEPS, _REACH * _STEPS + 1) / (_STEPS * span)
        self._bases: dict[Window, Complex] = {}

    def __call__(self, received: Complex) -> KnownSymbolFit:
        """Fit a frame.

        Args:
            received: complex128 (K, Nr); vectors of all symbol periods.
        """
        plan = self._plan
        y = received[plan.rows]
        # Lags first, at the flat channel's carrier: with as many as can be, a short section would
        # fit any carrier.
        window = FirFit(plan.shifted, y, plan.window).best(plan.windows)
        carrier = 0.0
        for _ in range(2):
            carrier = self._carrier(y, window)
            fit = FirFit(plan.shifted, self._turned(y, carrier), plan.window)
            window = fit.best(plan.windows)
        channel = fit.solve(window)
        return KnownSymbolFit(carrier, self._variance(channel), channel)

    def _turned(self, y: Complex, carrier: float) -> Complex:
        turn = np.exp(-2j * np.pi * carrier * self._offset)
        return np.asarray(turn[:, None] * y, np.complex128)

    def _basis(self, window: Window) -> Complex:
        """Orthonormal basis of what the known symbols can make: (n, q)."""
        if window not in self._bases:
            first = window.first - self._plan.window.first
            shifted = self._plan.shifted[:, first : first + window.size]
            flat = shifted.reshape(len(shifted), -1)
            left, values, _ = np.linalg.svd(flat, full_matrices=False)
            self._bases[window] = left[:, values > 1e-6 * values[0]].conj().T
        return self._bases[window]

    def _carrier(self, y: Complex, window: Window) -> float:
        basis = self._basis(window)

        def unexplained(carrier: float) -> float:
            return -float(np.sum(np.abs(basis @ self._turned(y, carrier)) ** 2))

        values = [unexplained(float(f)) for f in self._grid]
        top = float(self._grid[int(np.argmin(values))])
        step = float(self._grid[1] - self._grid[0])
        ends = (top - step, top + step)
        best = scipy.optimize.minimize_scalar(
            unexplained, bounds=ends, method="bounded", options={"xatol": 1e-4 * step}
        )
        return float(best.x)

    def _variance(self, channel: FirChannel) -> float:
        """Inverse information about the carrier, the channel unknown."""
        first = channel.window.first - self._plan.window.first
        shifted = self._plan.shifted[:, first : first + channel.window.size]
        made = np.einsum("kla,lra->kr", shifted, channel.taps) * self._offset[:, None]
        basis = self._basis(channel.window)
        left = made - basis.conj().T @ (basis @ made)
        information = 2.0 * float(np.sum(np.abs(left) ** 2)) / channel.noise
        return 1.0 / max(information, 1e-30)


def sampled(
    planes: NDArray[np.float32],
    t0: float,
    step: float,
    periods: NDArray[np.int64],
    bank: FilterBank,
    *,
    slopes: bool = False,
) -> Complex:
    """Matched-filter outputs of symbol periods, complex128 (n, Nr); or their slopes, per sample."""
    out = np.empty((periods.size, 2, planes.shape[0]), np.float32)
    table = bank.slopes if slopes else bank.taps
    sample_periods(planes, t0, step, periods, table, bank.phases, out)
    return np.asarray(out[:, 0] + 1j * out[:, 1].astype(np.float64), np.complex128)
