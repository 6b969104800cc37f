"""Matched filter that can be read at any instant: a fine polyphase table.

Method: F. J. Harris and M. Rice, "Multirate digital filters for symbol timing synchronization in
software defined radios", IEEE J. Sel. Areas Commun. 19(12), 2001; the derivative table is the
matched filter of the timing error.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError
from spatiq.kernels import C64, F32, I64, inlined, kernel
from spatiq.receiver.pulse_correlation import PulseCorrelation, pulse_correlation
from spatiq.signal.pulses import Pulse

# Table steps per symbol. The nearest row is read; its instant is off by a uniform error of at most
# half a step, an EVM of (1/4096) sqrt(4 pi^2 xi / 12), -78 dB.
_STEPS_PER_SYMBOL = 4096
_CURVATURE_LAGS = 8  # beyond, the derivatives of usual pulses hardly overlap
_SLOPE_STEP = 1e-4  # samples; central difference in double precision, error below 1e-7


@dataclass(frozen=True, eq=False)
class FilterBank:
    """Pulse and derivative sampled at P fractional positions of the instant between two samples.

    Attributes:
        samples_per_symbol: nominal ratio, any real number.
        phases: P.
        half: the taps cover samples floor(t) - half + 1 .. floor(t) + half.
        taps: float32, shape (P+1, 2*half); unit energy.
        slopes: float32, same shape; derivative with respect to t, per sample.
        slope_energy: mean energy of a row of `slopes`, per sample squared; equals
            4 pi^2 xi / samples_per_symbol^2 with xi of the modified Cramer-Rao bound for timing.
        curvature: float64, shape (M+1,); correlation of the pulse's derivative with itself m symbol
            periods on, per sample squared; curvature[0] is slope_energy.
        correlation: of the pulse with itself at any distance.
    """

    samples_per_symbol: float
    phases: int
    half: int
    taps: NDArray[np.float32]
    slopes: NDArray[np.float32]
    slope_energy: float
    curvature: NDArray[np.float64]
    correlation: PulseCorrelation

    @property
    def parts(self) -> tuple[NDArray[np.float32], NDArray[np.float32], int, float]:
        """Taps, slopes, phases, slope energy: as kernels take them."""
        return self.taps, self.slopes, self.phases, self.slope_energy


def filter_bank(pulse: Pulse, samples_per_symbol: float) -> FilterBank:
    """Tabulate the matched filter of a pulse.

    Raises:
        InputError: when the pulse's bandwidth does not fit the sample rate.
    """
    if pulse.bandwidth > samples_per_symbol and pulse.name != "rectangular":
        raise InputError(
            "recording",
            "sample rate",
            f"{samples_per_symbol:.6g} samples per symbol",
            f"at least {pulse.bandwidth:.6g}, the pulse's bandwidth in symbol rates",
        )
    wanted = max(64.0, _STEPS_PER_SYMBOL / samples_per_symbol)
    phases = 1 << int(np.ceil(np.log2(wanted)))
    half = int(np.ceil(pulse.half_span * samples_per_symbol)) + 1
    tap = np.arange(2 * half) - (half - 1)
    instants = np.arange(phases + 1)[:, None] / phases

    t = (tap - instants) / samples_per_symbol
    taps = pulse.samples(t, samples_per_symbol) / np.sqrt(samples_per_symbol)
    slopes = _slopes(pulse, t, samples_per_symbol)
    slope_energy = float(np.mean(np.sum(slopes[:-1] ** 2, axis=1)))
    return FilterBank(
        samples_per_symbol=samples_per_symbol,
        phases=phases,
        half=half,
        taps=taps.astype(np.float32),
        slopes=slopes.astype(np.float32),
        slope_energy=slope_energy,
        curvature=_curvature(pulse, samples_per_symbol) * slope_energy,
        correlation=pulse_correlation(pulse, samples_per_symbol),
    )


def _curvature(pulse: Pulse, samples_per_symbol: float) -> NDArray[np.float64]:
    """Correlation of the derivative at lags of whole symbol periods, 1 at lag 0."""
    fine = 64
    reach = int(np.ceil(pulse.half_span * fine))
    slope = _slopes(pulse, np.arange(-reach, reach + 1) / fine, samples_per_symbol)
    lags = range(min(_CURVATURE_LAGS, 2 * reach // fine) + 1)
    each = [float(slope[m * fine :] @ slope[: slope.size - m * fine]) for m in lags]
    return np.array(each) / each[0]


def _slopes(pulse: Pulse, t: NDArray[np.float64], samples_per_symbol: float) -> NDArray[np.float64]:
    """Derivative of the taps with respect to the sampling instant, per sample.

    Differences reach only to points inside the pulse: the jump where it is cut off is no slope.
    """
    step = _SLOPE_STEP / samples_per_symbol
    reach = pulse.half_span
    inside = np.abs(t) <= reach
    before = np.where(t - step >= -reach, t - step, t)
    after = np.where(t + step <= reach, t + step, t)
    gap = np.where(inside, after - before, 1.0)
    rise = pulse.samples(after, samples_per_symbol) - pulse.samples(before, samples_per_symbol)
    slope = np.where(inside, -rise / gap, 0.0)
    scale = samples_per_symbol * np.sqrt(samples_per_symbol)
    return np.asarray(slope / scale, np.float64)


@inlined
def filter_at(planes: F32, t: float, table: F32, phases: int, out: F32, row: int) -> None:
    """Filter outputs of all channels at instant t into out[row], out float32 (n, 2, Nr).

    Whole arrays and an index are handed on rather than slices, whose bookkeeping costs more than
    the filter.

    planes float32 (Nr, 2, n), C-contiguous. Instants whose taps would leave the planes read as
    zero: a track that has run away yields nothing, and shows in its residuals.
    """
    whole = int(np.floor(t))
    length = table.shape[1]
    first = whole - length // 2 + 1
    if first < 0 or first + length > planes.shape[2]:
        for r in range(planes.shape[0]):
            out[row, 0, r] = np.float32(0.0)
            out[row, 1, r] = np.float32(0.0)
        return
    taps = table[int((t - whole) * phases + 0.5)]
    for r in range(planes.shape[0]):
        # Slices first: with indices known to start at zero, the loop vectorises.
        plane_re = planes[r, 0, first : first + length]
        plane_im = planes[r, 1, first : first + length]
        re = np.float32(0.0)
        im = np.float32(0.0)
        for i in range(length):
            re += plane_re[i] * taps[i]
            im += plane_im[i] * taps[i]
        out[row, 0, r] = re
        out[row, 1, r] = im


@kernel
def sample_instants(
    planes: F32, origin: float, first: int, step: float, table: F32, phases: int, out: C64
) -> None:
    """Matched-filter outputs at (first + m)*step - origin, m = 0..n-1, into out complex64 (Nr, n).

    The product is formed before the subtraction, so that an instant of the grid has the same bits
    whatever the window it is read from.
    """
    y = np.empty((1, 2, planes.shape[0]), np.float32)
    for m in range(out.shape[1]):
        filter_at(planes, (first + m) * step - origin, table, phases, y, 0)
        for r in range(planes.shape[0]):
            out[r, m] = complex(y[0, 0, r], y[0, 1, r])


@kernel
def sample_periods(
    planes: F32, t0: float, step: float, periods: I64, table: F32, phases: int, out: F32
) -> None:
    """Matched-filter outputs of symbol periods at t0 + k*step, into out float32 (n, 2, Nr)."""
    for i in range(periods.size):
        filter_at(planes, t0 + periods[i] * step, table, phases, out, i)


@kernel
def derotate(planes: F32, cycles_per_sample: float, origin: float) -> None:
    """Multiply planes float32 (Nr, 2, n) in place by exp(-j 2 pi f (i - origin)).

    One sine per 64 samples in double precision, a table of 64 steps in between.
    """
    step = 64
    cosines = np.empty(step, np.float32)
    sines = np.empty(step, np.float32)
    for i in range(step):
        angle = -2.0 * np.pi * cycles_per_sample * i
        cosines[i] = np.cos(angle)
        sines[i] = np.sin(angle)
    n = planes.shape[2]
    for begin in range(0, n, step):
        cycles = -cycles_per_sample * (begin - origin)
        angle = 2.0 * np.pi * (cycles - np.floor(cycles))
        base_re = np.float32(np.cos(angle))
        base_im = np.float32(np.sin(angle))
        count = min(step, n - begin)
        for r in range(planes.shape[0]):
            real = planes[r, 0, begin : begin + count]
            imag = planes[r, 1, begin : begin + count]
            for i in range(count):
                c = base_re * cosines[i] - base_im * sines[i]
                s = base_re * sines[i] + base_im * cosines[i]
                re = real[i] * c - imag[i] * s
                imag[i] = real[i] * s + imag[i] * c
                real[i] = re
