"""How large is a step of the gain inside a frame, and where exactly? And its correction.

The amplitude behind the step is estimated by expectation-maximisation over the codewords, common to
the receive channels unless they differ significantly; the place is the sample under which the
symbols around it are likeliest.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import scipy.stats
from numpy.typing import NDArray

from spatiq.receiver.break_search import Break
from spatiq.receiver.frame_batch import FrameBatch
from spatiq.receiver.frame_model import Floats, FrameModel

_ROUNDS = 6
_APART = 1e-6  # chance that channels with one common step pass for ones that differ
_NEAR = 12  # symbol periods on either side that tell the place
_PLACES = 49  # tried


@dataclass(frozen=True, eq=False)
class GainStep:
    """A step: amplitude ratio per channel, its std (relative), the sample, period, and its std."""

    gain: Floats
    gain_std: float
    cut: int
    place: float
    std: float


def weigh_step(model: FrameModel, order: NDArray[np.int64], found: Break, way: int) -> GainStep:
    """Size and place of a step found at `order[found.at]`, travelling `way`."""
    behind = order[found.at :]
    y = model.outputs(model.tables.active[behind])
    assert found.gain is not None
    gain, energy = found.gain.copy(), np.zeros(y.shape[1])
    start = 2 if behind.size > 8 else 0  # the pulse reaches over the step
    for _ in range(_ROUNDS):
        ratio, energy = _ratio(model, behind[start:], y[start:] / gain)
        gain *= ratio
    common = float(np.exp(energy @ np.log(np.maximum(gain, 1e-6)) / energy.sum()))
    variance = model.noise / (2.0 * np.maximum(energy, 1e-300))  # of ln gain
    unlike = float(np.sum((np.log(np.maximum(gain, 1e-6) / common)) ** 2 / variance))
    freedom = gain.size - 1
    if freedom == 0 or unlike < scipy.stats.chi2.isf(_APART, freedom):
        gain = np.full(gain.size, common)
    cut, place, std = _place(model, order, found.at, gain, way)
    return GainStep(gain, float(np.sqrt(1.0 / np.sum(1.0 / variance))), cut, place, std)


def _ratio(
    model: FrameModel, at: NDArray[np.int64], y: NDArray[np.complex128]
) -> tuple[Floats, Floats]:
    """Amplitude over what is expected, per channel, and the energy it rests on."""
    amplitude = model.tables.active_amplitude[at].astype(np.float64)
    scaled = y / amplitude[:, None]
    near = 2.0 * np.real(scaled @ model.points.conj().T) - np.sum(np.abs(model.points) ** 2, axis=1)
    near *= (amplitude**2 / model.noise)[:, None]
    weight = np.exp(near - near.max(axis=1, keepdims=True))
    weight /= weight.sum(axis=1, keepdims=True)
    weight[model.tables.active_word[at] < 0] = 0.0
    mean = (weight @ model.points) * amplitude[:, None] + model.known[at]
    energy = (amplitude**2) @ (weight @ np.abs(model.points) ** 2) + np.sum(
        np.abs(model.known[at]) ** 2, axis=0
    )
    return np.sum(np.real(mean.conj() * y), axis=0) / energy, energy


def _place(
    model: FrameModel, order: NDArray[np.int64], at: int, gain: Floats, way: int
) -> tuple[int, float, float]:
    """Sample of the step, its symbol period, and the standard deviation of that."""
    near = np.sort(order[max(at - _NEAR, 0) : at + _NEAR])
    periods = model.tables.active[near]
    centre = model.t0 + float(model.tables.active[order[at]]) * model.step
    reach = int(np.ceil(6 * model.step))
    tried = np.unique(np.round(centre + np.linspace(-reach, reach, _PLACES)).astype(int))
    # Only the samples that these symbols read.
    half = model.bank.half + 1
    low = max(int(model.t0 + periods[0] * model.step) - half, 0)
    high = int(model.t0 + periods[-1] * model.step) + half + 1
    window = model.planes[:, :, low:high]
    worth = np.empty(tried.size)
    for i, cut in enumerate(tried):
        planes = window.copy()
        _divide(planes, cut - low, gain, way)
        own = replace(model, planes=planes, t0=model.t0 - low)
        worth[i] = float(np.sum(own.as_sent(near, own.outputs(periods))))
        behind = (periods >= (cut - model.t0) / model.step) == (way > 0)
        worth[i] -= 2.0 * float(behind.sum() * np.log(gain).sum())
    chance = np.exp(worth - worth.max())
    chance /= chance.sum()
    places = (tried - model.t0) / model.step
    mean = float(chance @ places)
    spacing = float(np.diff(places).mean()) if places.size > 1 else 1.0
    std = float(np.sqrt(chance @ (places - mean) ** 2 + spacing**2 / 12.0))
    return int(tried[int(np.argmax(worth))]), mean, std


def _divide(planes: NDArray[np.float32], cut: int, gain: Floats, way: int) -> None:
    cut = min(max(cut, 0), planes.shape[2])
    behind = slice(cut, None) if way > 0 else slice(0, cut)
    planes[:, :, behind] /= gain[:, None, None].astype(np.float32)


def mend_step(one: FrameBatch, step: GainStep, way: int) -> None:
    """Give the samples behind the step the gain of those before it."""
    _divide(one.planes[0], step.cut, step.gain, way)
