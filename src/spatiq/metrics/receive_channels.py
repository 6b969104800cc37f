"""Figures of the receiver's own front end: each receive channel's, per frame and over all frames.

Gain g of Q over I and departure phi from quadrature follow from the image coefficient c by
g exp(j phi) = (1 - c) / (1 + c); image rejection is |c|^-2 (M. Valkama, M. Renfors, V. Koivunen,
IEEE Trans. Signal Process. 49(10), 2001; from memory).
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
import scipy.stats
from numpy.typing import NDArray

from spatiq.metrics.frame_table import Mark, MeasuredFrames, ReceiveFigures
from spatiq.receiver.frame_batch import FrameBatch
from spatiq.receiver.front_end import CONSTANT_CORRECTED, IMAGE_CORRECTED
from spatiq.receiver.front_end_kernels import LAGS

# Probability, per frame, that errors which are white in time are marked as correlated.
_CORRELATED = 1e-6
_DECIBEL = 20 / np.log(10)


def gain_and_phase(
    image: NDArray[np.complex128],
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Gain of Q over I in dB and departure from quadrature in degrees, of image coefficients."""
    with np.errstate(invalid="ignore"):  # a missing one stays so
        ratio = (1 - image) / (1 + image)
    return 20 * np.log10(np.abs(ratio)), np.degrees(np.angle(ratio))


def receive_figures(batch: FrameBatch, signal_power: NDArray[np.float64]) -> ReceiveFigures | None:
    """Per-frame figures of each receive channel; None when no stage estimated them."""
    found = batch.front_end
    if found is None:
        return None
    gain, phase = gain_and_phase(found.image)
    # Half of the coefficient's variance is along each axis; |d(ln g)| = 2 |d(Re c)|.
    spread = np.sqrt(found.image_var / 2)
    return ReceiveFigures(
        image=found.image,
        image_var=found.image_var,
        constant=found.constant,
        constant_var=found.constant_var,
        iq_gain_db=gain,
        iq_gain_std_db=2 * _DECIBEL * spread,
        iq_phase_deg=phase,
        iq_phase_std_deg=2 * np.degrees(spread),
        sample_power=signal_power / batch.step,
    )


def fill_front_end(
    columns: dict[str, NDArray[Any]], batch: FrameBatch, sample_rate: float, inverted: bool
) -> NDArray[np.uint32]:
    """Fill the front end's columns, signal_power being in; returns the frames' marks.

    Levels are relative to the signal's mean power in a sample while payload is sent.
    """
    marks = np.full(batch.count, Mark.SPECTRUM_INVERTED if inverted else 0, np.uint32)
    found = batch.front_end
    if found is None:
        return marks
    sample_power = columns["signal_power"] / batch.step
    worst = np.fmax.reduce(np.abs(found.image), axis=1)
    columns["image_rejection_db"][:] = -20 * np.log10(worst)
    offset = np.fmax.reduce(np.abs(found.constant) ** 2, axis=1)
    columns["dc_db"][:] = 10 * np.log10(offset / sample_power)
    columns["error_correlation"][:] = np.abs(found.correlation).max(axis=1)
    power = batch.line_power.mean(axis=2)
    some = np.isfinite(power).any(axis=1)
    top = np.argmax(np.where(np.isfinite(power), power, -1.0), axis=1)
    rows = np.arange(batch.count)
    sign = -1.0 if inverted else 1.0
    hertz = sign * batch.line_frequency[rows, top] * sample_rate
    columns["interferer_hz"][:] = np.where(some, hertz, np.nan)
    level = 10 * np.log10(power[rows, top] / sample_power)
    columns["interferer_db"][:] = np.where(some, level, np.nan)
    marks[(batch.corrected & IMAGE_CORRECTED) > 0] |= np.uint32(Mark.IQ_CORRECTED)
    marks[(batch.corrected & CONSTANT_CORRECTED) > 0] |= np.uint32(Mark.DC_CORRECTED)
    marks[some] |= np.uint32(Mark.INTERFERER)
    limit = scipy.stats.gamma.isf(_CORRELATED / batch.channel.shape[1], LAGS)
    # Below an EVM of -50 dB errors are rounding and pulse truncation, which follow no chance law.
    floor = 1e-5 * columns["signal_power"]
    correlated = (found.correlation_score > limit) & (columns["noise_power"] > floor)
    marks[correlated] |= np.uint32(Mark.ERRORS_CORRELATED)
    return marks


@dataclass
class ReceivePool:
    """Image and constant of each receive channel over all frames, weighted by their variances."""

    _sums: NDArray[np.complex128] | None = None
    _weights: NDArray[np.float64] = field(default_factory=lambda: np.zeros((2, 0)))
    _power: list[float] = field(default_factory=lambda: [0.0, 0.0])

    def add(self, measured: MeasuredFrames) -> None:
        """Take in a batch."""
        found = measured.receive
        if found is None or not measured.count:
            return
        if self._sums is None:
            self._sums = np.zeros((2, found.image.shape[1]), np.complex128)
            self._weights = np.zeros(self._sums.shape)
        pairs = ((found.image, found.image_var), (found.constant, found.constant_var))
        for row, (value, variance) in enumerate(pairs):
            good = np.isfinite(value) & (variance > 0)
            weight = np.where(good, 1.0 / np.where(good, variance, 1.0), 0.0)
            self._sums[row] += np.sum(weight * np.where(good, value, 0.0), axis=0)
            self._weights[row] += weight.sum(axis=0)
        power = found.sample_power[np.isfinite(found.sample_power)]
        self._power[0] += float(power.sum())
        self._power[1] += power.size

    def as_list(self, confidence: float) -> list[dict[str, Any]]:
        """One entry a receive channel; None where nothing could be told.

        `image_rejection_low_db` is the lower bound at the confidence given.
        """
        if self._sums is None:
            return []
        with np.errstate(invalid="ignore", divide="ignore"):
            value = self._sums / self._weights
            spread = np.sqrt(1.0 / self._weights)
            gain, phase = gain_and_phase(value[0])
            each = 2 * spread[0] / np.sqrt(2)
            power = self._power[0] / self._power[1] if self._power[1] else np.nan
            reach = spread[0] * np.sqrt(-np.log(1 - confidence))
            rows = {
                "iq_gain_db": gain,
                "iq_gain_std_db": _DECIBEL * each,
                "iq_phase_deg": phase,
                "iq_phase_std_deg": np.degrees(each),
                "image_rejection_db": -20 * np.log10(np.abs(value[0])),
                "image_rejection_low_db": -20 * np.log10(np.abs(value[0]) + reach),
                "dc_real": value[1].real,
                "dc_imag": value[1].imag,
                "dc_std": spread[1],
                "dc_db": 10 * np.log10(np.abs(value[1]) ** 2 / power),
            }
        return [
            {"channel": r}
            | {k: float(v[r]) if np.isfinite(v[r]) else None for k, v in rows.items()}
            for r in range(value.shape[1])
        ]
