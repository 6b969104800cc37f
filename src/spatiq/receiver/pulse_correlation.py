"""What a pulse leaves at the output of its own matched filter, at any distance, and its slope.

A symbol whose pulse is displaced against the instant of sampling shows by this function; from it
follow the interference between antennas of different delay and what symbols tell about delays.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import CubicSpline

from spatiq.signal.pulses import Pulse

_FINE = 64  # nodes per symbol period: cubic interpolation errs by less than 1e-7


@dataclass(frozen=True, eq=False)
class PulseCorrelation:
    """g(u): autocorrelation of the unit-energy pulse at distances u in symbol periods.

    Attributes:
        reach: g(u) = 0 beyond.
        value, slope, bend: g, dg/du and -d2g/du2 on arrays of distances within the reach.
    """

    reach: float
    value: CubicSpline
    slope: CubicSpline
    bend: CubicSpline

    def at(self, spline: CubicSpline, u: NDArray[np.float64]) -> NDArray[np.float64]:
        """One of the functions at any distance, zero beyond the reach."""
        inside = np.abs(u) <= self.reach
        return np.where(inside, spline(np.where(inside, u, 0.0)), 0.0)

    def slope_at(self, u: float) -> float:
        """dg/du at one distance."""
        return float(self.slope(u)) if abs(u) <= self.reach else 0.0


def pulse_correlation(pulse: Pulse, samples_per_symbol: float) -> PulseCorrelation:
    """Tabulate the autocorrelation of a pulse as sampled at a rate."""
    reach = 2.0 * pulse.half_span
    ends = int(np.ceil(pulse.half_span * _FINE))
    fine = pulse.samples(np.arange(-ends, ends + 1) / _FINE, samples_per_symbol)
    both = np.correlate(fine, fine, "full") / _FINE
    lags = np.arange(both.size) - (both.size - 1) // 2
    value = CubicSpline(lags / _FINE, both / both.max())
    slope = value.derivative()
    return PulseCorrelation(min(reach, float(lags[-1]) / _FINE), value, slope, _negated(slope))


def _negated(slope: CubicSpline) -> CubicSpline:
    """-d/du of a slope, smooth: the second derivative of a cubic spline is only linear."""
    nodes = slope.x
    return CubicSpline(nodes, -CubicSpline(nodes, slope(nodes)).derivative()(nodes))
