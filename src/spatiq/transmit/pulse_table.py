"""A pulse tabulated at fine fractions of a sample, for symbols anywhere between samples."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError
from spatiq.signal.pulses import Pulse

# Worst energy of the interpolation error, relative to the pulse's energy: -100 dB.
WORST_ERROR = 1e-10
LARGEST_TABLE = 1 << 24
# A symbol instant that is an integer but for rounding keeps the samples at both edges of the pulse.
EDGE_TOLERANCE = 1e-6


@dataclass(frozen=True, eq=False)
class PulseTable:
    """Sampled pulse for every fraction of a sample, to be interpolated linearly between rows.

    A symbol at time t (samples) with base = floor(t) and fraction f = t - base contributes
    x * row(f)[m] to sample base - before + m, for |m - before - f| <= reach only.

    Attributes:
        rows: float32, shape (P + 1, taps), C-contiguous; row j holds fraction j / P.
        before: taps before the base sample.
        reach: half length of the pulse in samples.
        spacing: samples per symbol period, clock offset included.
        error_db: measured worst energy of the interpolation error, dB relative to the pulse.
    """

    rows: NDArray[np.float32]
    before: int
    reach: float
    spacing: float
    error_db: float


@dataclass(frozen=True, eq=False)
class _Scale:
    """How pulse time maps to samples."""

    pulse: Pulse
    samples_per_symbol: float
    spacing: float

    @property
    def reach(self) -> float:
        return self.pulse.half_span * self.spacing

    def at(self, times: NDArray[np.float64]) -> NDArray[np.float64]:
        """Pulse at times in samples; unit energy in samples."""
        values = self.pulse.samples(times / self.spacing, self.samples_per_symbol)
        return np.asarray(values / np.sqrt(self.samples_per_symbol), np.float64)


def _row_values(scale: _Scale, fractions: NDArray[np.float64]) -> NDArray[np.float64]:
    """Pulse at the sample instants around a symbol, shape (len(fractions), taps)."""
    reach = scale.reach
    before = int(np.floor(reach))
    taps = np.arange(2 * before + 2) - before
    times = taps[None, :] - fractions[:, None]
    # Beyond its edge a truncated pulse is continued oddly about the edge value. Those entries are
    # never used as they are; they keep the interpolation exact right up to the edge.
    edge = np.sign(times) * reach * (1 - 1e-12)
    outside = np.abs(times) > reach
    values = scale.at(np.where(outside, 2 * edge - times, times))
    values = np.where(outside, 2 * scale.at(edge) - values, values)
    return np.where(np.abs(times) > reach + 1.0, 0.0, values)


def _worst_error(scale: _Scale, rows: NDArray[np.float64]) -> float:
    """Largest error energy between rows, relative to the pulse's energy."""
    phases = len(rows) - 1
    fractions = (np.arange(phases) + 0.5) / phases
    exact = _row_values(scale, fractions)
    between = 0.5 * (rows[:-1] + rows[1:])
    before = int(np.floor(scale.reach))
    times = np.arange(rows.shape[1])[None, :] - before - fractions[:, None]
    error = np.where(np.abs(times) <= scale.reach, between - exact, 0.0)
    energy = np.sum(rows[0] ** 2)
    return float(np.max(np.sum(error**2, axis=1)) / energy)


def pulse_table(pulse: Pulse, samples_per_symbol: float, clock_ppm: float = 0.0) -> PulseTable:
    """Tabulate p(t / spacing) / sqrt(samples_per_symbol), spacing = sps * (1 + clock_ppm * 1e-6).

    The number of rows is doubled until linear interpolation between them errs by less than -100 dB.

    Args:
        pulse: the pulse.
        samples_per_symbol: nominal, any real number from 1 up.
        clock_ppm: how much longer than nominal the symbol period is, in parts per million.

    Raises:
        InputError: samples_per_symbol below 1 or too large, clock_ppm not within 1000, or a pulse
            that cannot be tabulated to that accuracy.
    """
    if not (1.0 <= samples_per_symbol <= 4096.0):
        raise InputError("samples per symbol", "", samples_per_symbol, "a number from 1 to 4096")
    if not abs(clock_ppm) <= 1000.0:
        raise InputError("clock offset", "", clock_ppm, "at most 1000 ppm either way")
    spacing = samples_per_symbol * (1 + clock_ppm * 1e-6)
    scale = _Scale(pulse, samples_per_symbol, spacing)
    phases = 8
    while phases * samples_per_symbol < 1024:
        phases *= 2
    while True:
        rows = _row_values(scale, np.arange(phases + 1) / phases)
        error = _worst_error(scale, rows)
        if error <= WORST_ERROR:
            break
        if 2 * rows.size > LARGEST_TABLE:
            raise InputError(
                "pulse", "shape", "a pulse too steep to tabulate", "one that changes more smoothly"
            )
        phases *= 2
    return PulseTable(
        rows=np.ascontiguousarray(rows, np.float32),
        before=int(np.floor(scale.reach)),
        reach=scale.reach + EDGE_TOLERANCE,
        spacing=spacing,
        error_db=float(10 * np.log10(max(error, 1e-30))),
    )
