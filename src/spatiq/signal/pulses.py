"""Pulse shapes: unit energy, time in symbol periods, evaluated at any instant.

Waveform convention of the whole package: symbols x_k, begun at sample t0, sps samples per symbol:

    r[n] = sum_k x_k p((n - t0 - k sps) / sps) / sqrt(sps)

so that the discrete matched filter made of the same samples has unit energy, and white noise of
variance N0 per sample gives N0 per symbol. (That holds for band-limited shapes. A rectangle is not:
its energy is 1 - 1/(2 sps) when its edges fall on sample instants, 1 when midway between two.)
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import i0

from spatiq.errors import InputError

Floats = NDArray[np.float64]

MAX_SPAN = 512
MAX_TAPS = 65536
# Interpolation between taps: a Kaiser window of this half width (in taps) and shape keeps images
# 81 dB down for anything below 0.42 of the taps' sample rate (Kaiser 1974: A = beta/0.1102 + 8.7).
KAISER_HALF_WIDTH = 16
KAISER_BETA = 8.0
# Share of a tapped pulse's power inside its stated bandwidth.
OCCUPIED_SHARE = 0.9999


@dataclass(frozen=True, eq=False)
class Pulse:
    """A real pulse p(t) of unit energy, centred on t = 0.

    Attributes:
        name: shape and parameters, for people.
        half_span: p(t) is zero for |t| > half_span, symbol periods.
        bandwidth: two-sided bandwidth in symbol rates. Root raised cosine: 1 + roll-off. Taps: what
            holds 99.99 % of the power. Rectangle: 2, its main lobe, beyond which power remains.
        band_limited: False where power beyond `bandwidth` is not small (rectangle).
        shape: the function behind `samples`; takes t and samples per symbol.
    """

    name: str
    half_span: float
    bandwidth: float
    band_limited: bool
    shape: Callable[[Floats, float], Floats]

    def samples(self, t: ArrayLike, samples_per_symbol: float) -> Floats:
        """Pulse values.

        Args:
            t: instants in symbol periods, any shape.
            samples_per_symbol: rate at which the waveform is sampled, >= 1. Only the rectangle
                depends on it: each value is its mean over one sample interval round t.

        Returns:
            float64, same shape as t; zero outside the span.

        Raises:
            InputError: samples_per_symbol is below 1 or not finite.
        """
        _check_rate(samples_per_symbol)
        times = np.asarray(t, np.float64)
        return np.where(np.abs(times) <= self.half_span, self.shape(times, samples_per_symbol), 0.0)


def _check_rate(samples_per_symbol: float) -> None:
    if not 1.0 <= samples_per_symbol < np.inf:
        raise InputError("pulse", "samples_per_symbol", samples_per_symbol, "a number >= 1")


def root_raised_cosine_value(t: ArrayLike, rolloff: float) -> Floats:
    """The endless root-raised-cosine pulse of unit energy, h(t), t in symbol periods.

    The usual quotient (Proakis, Digital Communications) is 0/0 at t = 0 and t = 1/(4 rolloff). This
    is the inverse Fourier transform of the flat part plus that of the two cosine flanks: the same
    function as a sum of sincs, without singular points, good to double precision everywhere.
    """
    t = np.asarray(t, np.float64)
    flat = (1.0 - rolloff) * np.sinc((1.0 - rolloff) * t)
    upper = np.sinc(rolloff * t + 0.25) * np.cos(np.pi * (t + 0.25))
    lower = np.sinc(rolloff * t - 0.25) * np.cos(np.pi * (t - 0.25))
    return np.asarray(flat + rolloff * (upper + lower), np.float64)


def _energy(shape: Callable[[Floats], Floats], edges: Floats) -> float:
    """Integral of the square between the outer edges: 24-point Gauss rule from edge to edge."""
    nodes, weights = np.polynomial.legendre.leggauss(24)
    half = np.diff(edges)[:, None] / 2
    values = shape(edges[:-1, None] + half * (1.0 + nodes))
    return float(np.sum(half * weights * values**2))


@dataclass(frozen=True)
class _RootRaisedCosine:
    rolloff: float
    scale: float

    def __call__(self, t: Floats, samples_per_symbol: float) -> Floats:
        return self.scale * root_raised_cosine_value(t, self.rolloff)


def root_raised_cosine(rolloff: float, span_symbols: float) -> Pulse:
    """Root raised cosine cut off at +-span_symbols/2 and scaled back to unit energy.

    Args:
        rolloff: 0 to 1.
        span_symbols: whole length of the pulse in symbol periods, 1 to 512.

    Raises:
        InputError: a parameter out of range.
    """
    if not 0.0 <= rolloff <= 1.0:
        raise InputError("root-raised-cosine", "rolloff", rolloff, "0 to 1")
    if not 1.0 <= span_symbols <= MAX_SPAN:
        raise InputError("root-raised-cosine", "span_symbols", span_symbols, f"1 to {MAX_SPAN}")
    half_span = span_symbols / 2
    panels = int(np.ceil(2 * span_symbols)) + 1
    edges = np.linspace(-half_span, half_span, panels)
    energy = _energy(lambda t: root_raised_cosine_value(t, rolloff), edges)
    return Pulse(
        name=f"root raised cosine, roll-off {rolloff:g}, span {span_symbols:g} symbols",
        half_span=half_span,
        bandwidth=1.0 + rolloff,
        band_limited=True,
        shape=_RootRaisedCosine(float(rolloff), 1.0 / np.sqrt(energy)),
    )


@dataclass(frozen=True)
class _Rectangle:
    def __call__(self, t: Floats, samples_per_symbol: float) -> Floats:
        half = 0.5 / samples_per_symbol
        overlap = np.minimum(t + half, 0.5) - np.maximum(t - half, -0.5)
        return np.asarray(np.maximum(overlap, 0.0) * samples_per_symbol, np.float64)


def rectangular() -> Pulse:
    """One symbol period long, height 1; each sample is the mean over its own interval.

    The averaging widens the support to +-(1/2 + 1/(2 sps)); the half span of 1 covers any sps >= 1.
    """
    return Pulse("rectangular", 1.0, 2.0, False, _Rectangle())


def _interpolation_kernel(x: Floats) -> Floats:
    """Kaiser-windowed sinc: 1 at 0, 0 at the other whole numbers and beyond the half width."""
    inside = np.maximum(1.0 - (x / KAISER_HALF_WIDTH) ** 2, 0.0)
    window = i0(KAISER_BETA * np.sqrt(inside)) / i0(KAISER_BETA)
    return np.where(np.abs(x) < KAISER_HALF_WIDTH, np.sinc(x) * window, 0.0)


@dataclass(frozen=True, eq=False)
class _Tapped:
    taps: Floats
    samples_per_symbol: float

    def at(self, position: Floats) -> Floats:
        """Interpolated value at `position` in taps, 0 being the first tap."""
        first = np.floor(position).astype(np.int64) - KAISER_HALF_WIDTH + 1
        total = np.zeros(position.shape)
        for k in range(2 * KAISER_HALF_WIDTH):
            index = first + k
            known = (index >= 0) & (index < self.taps.size)
            tap = np.where(known, self.taps[np.where(known, index, 0)], 0.0)
            total += tap * _interpolation_kernel(position - index)
        return total

    def __call__(self, t: Floats, samples_per_symbol: float) -> Floats:
        return self.at(t * self.samples_per_symbol + (self.taps.size - 1) / 2)


def _occupied(shape: _Tapped, reach: int) -> float:
    """Two-sided bandwidth, in tap rates, that holds OCCUPIED_SHARE of the power."""
    positions = np.arange(-4 * reach, 4 * (shape.taps.size - 1 + reach) + 1) / 4
    length = 1 << int(np.ceil(np.log2(8 * positions.size)))
    power = np.abs(np.fft.rfft(shape.at(positions), length)) ** 2
    power[1:] *= 2.0
    share = np.cumsum(power) / np.sum(power)
    return float(2.0 * 4.0 * np.searchsorted(share, OCCUPIED_SHARE) / length)


def explicit_taps(taps: ArrayLike, samples_per_symbol: float) -> Pulse:
    """A pulse given by its taps, scaled to unit energy; the time origin is the middle of the taps.

    Between taps it is the Kaiser-windowed sinc interpolation, which passes through every tap and
    rings on for 16 taps beyond the ends; good to -81 dB for pulses within 0.84 of the tap rate.

    Args:
        taps: real, shape (L,), 1 to 65536 of them, not all zero.
        samples_per_symbol: tap rate over symbol rate, >= 1.

    Raises:
        InputError: taps that are no such list, or a rate below 1.
    """
    _check_rate(samples_per_symbol)
    raw = np.asarray(taps)
    if raw.ndim != 1 or not 1 <= raw.size <= MAX_TAPS or raw.dtype.kind not in "iuf":
        raise InputError(
            "pulse",
            "taps",
            f"shape {raw.shape} of {raw.dtype}",
            f"a list of 1 to {MAX_TAPS} real numbers",
        )
    values = raw.astype(np.float64)
    peak = float(np.max(np.abs(values)))
    if not 0.0 < peak < np.inf:
        raise InputError("pulse", "taps", f"largest magnitude {peak}", "finite taps, not all zero")
    rate = float(samples_per_symbol)
    shape = _Tapped(values / peak, rate)
    reach = KAISER_HALF_WIDTH
    edges = np.arange(-reach, values.size + reach, dtype=np.float64)
    energy = _energy(shape.at, edges) / rate
    return Pulse(
        name=f"{values.size} taps at {rate:g} samples per symbol",
        half_span=((values.size - 1) / 2 + reach) / rate,
        bandwidth=_occupied(shape, reach) * rate,
        band_limited=True,
        shape=_Tapped(shape.taps / np.sqrt(energy), rate),
    )


def symbol_response(pulse: Pulse, samples_per_symbol: float, timing: float = 0.0) -> Floats:
    """Pulse through its own matched filter, sampled at symbol instants.

    Args:
        pulse: the shape.
        samples_per_symbol: rate of waveform and filter, any real number >= 1.
        timing: where the symbol instant falls between samples, in sample intervals.

    Returns:
        float64, shape (2 K + 1,): response k symbols after the peak, k = -K..K.
    """
    reach = int(np.ceil(2 * pulse.half_span))
    ends = int(np.ceil(pulse.half_span * samples_per_symbol)) + 1
    t = (np.arange(-ends, ends + 1) - timing) / samples_per_symbol
    filtered = pulse.samples(t, samples_per_symbol)
    lags = np.arange(-reach, reach + 1)
    shifted = pulse.samples(t - lags[:, None], samples_per_symbol)
    return np.asarray(shifted @ filtered / samples_per_symbol, np.float64)


def isi_floor(pulse: Pulse, samples_per_symbol: float, timing: float = 0.0) -> float:
    """Intersymbol interference left after the matched filter, in dB relative to the wanted symbol.

    Sum over all other symbols of the squared response, over the squared peak; -inf when none is
    left. A pulse cut off abruptly has its floor move with `timing`: root raised cosine, roll-off
    0.25, span 8, four samples per symbol: -49.4 dB aligned, -39.4 dB a quarter sample off.

    Args:
        pulse: the shape.
        samples_per_symbol: rate of waveform and filter.
        timing: where the symbol instant falls between samples, in sample intervals.
    """
    response = symbol_response(pulse, samples_per_symbol, timing)
    middle = response.size // 2
    wanted = response[middle] ** 2
    others = float(np.sum(response**2) - wanted)
    with np.errstate(divide="ignore"):
        return float(10.0 * np.log10(max(others, 0.0) / wanted))
