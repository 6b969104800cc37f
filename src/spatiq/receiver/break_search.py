"""Where does a frame stop going on as it began, and what happened there?

Each kind of break is an alternative law of the received vectors from some period on; the likeliest
pair of law and place is taken (maximum likelihood for a change point: D. V. Hinkley, Biometrika
57(1), 1970; from memory), when it beats an unbroken frame by more than the number of alternatives
explains.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from spatiq.receiver.frame_model import Complex, Floats, FrameModel

_SHIFTS = 16  # of timing within a symbol period that are tried
_TURNS = 16  # of the carrier's phase, at each of them
_FINE_SHIFTS = tuple(n / 64 for n in (1, 2, 3, -1, -2, -3))  # symbol periods
_FINE_TURNS = (0.03, 0.06, 0.1, 0.15, 0.2, 0.28)  # radians, either way
_GAINS = (0.25, 0.5, 1.0, 1.5, 2.0, *(float(n) for n in range(3, 17)))  # dB, either way
# Errors that the grids leave, over the signal power: half a step each of gain (0.5 dB); of timing
# (1.85 d symbol periods, see tracking) and phase, uniform, of the coarse grid and of the fine one.
_GAIN_LEFT = 1e-3
COARSE_LEFT, _FINE_LEFT = 1.4e-2, 1e-3
_NOISES = (1.6, 2.5, 4.0, 8.0, 16.0, 64.0, 256.0, 1e3, 1e4)  # ratios of noise power, either way
_CHANCE = np.log(1e-6)  # that an unbroken frame passes for broken, beyond the count of alternatives


@dataclass(frozen=True, eq=False)
class Break:
    """What the search found.

    Attributes:
        kind: "shift" (samples lost, or the phase jumped), "gain", "noise" or "silence".
        at: active periods of the order searched that come before it.
        late: timing of what follows over what was expected, share of a symbol period, 0 to 1.
        turn: phase of what follows over what was expected, radians.
        gain: float64 (Nr,); amplitude of what follows over what was expected.
        noise: noise power of what follows over what was expected.
        worth: log-likelihood ratio over an unbroken frame.
    """

    kind: str
    at: int
    late: float = 0.0
    turn: float = 0.0
    gain: Floats | None = None
    noise: float = 1.0
    worth: float = 0.0


def find_break(model: FrameModel, order: NDArray[np.int64]) -> Break | None:
    """The likeliest break among active periods (indices) in the order of travel.

    A recorder that loses samples makes what follows come early: travelling onwards timing moves
    back, travelling backwards it moves ahead; both are tried alike.
    """
    if not order.size:
        return None
    y = model.outputs(model.tables.active[order])
    going_on = model.as_sent(order, y)
    tail = _tail(model.silent(y) - going_on, model.unknown(y) - going_on)
    best: Break | None = None
    tried = 0
    for law, likelihood in _laws(model, order, y):
        tried += 1
        worth = np.cumsum((likelihood - going_on)[::-1])[::-1]  # of changing over at each place
        if law.kind == "silence":
            worth = tail[:-1]
        elif law.kind == "shift":  # which may bring the frame's end forward
            rest = tail - np.append(worth, 0.0)
            worth = worth + np.maximum.accumulate(rest[::-1])[::-1][:-1]
        at = int(np.argmax(worth))
        if best is None or worth[at] > best.worth:
            best = _placed(law, at, float(worth[at]))
    least = np.log(tried * order.size) - _CHANCE
    return best if best is not None and best.worth > least else None


def _tail(silent: Floats, unknown: Floats) -> Floats:
    """Worth of silence from each place on, after which another signal may follow, (n + 1,).

    It is what follows a frame; each change costs the number of places that it may be at.
    """
    cost = float(np.log(silent.size + 1.0))
    other = np.append(np.cumsum(unknown[::-1])[::-1], 0.0)
    tail = np.zeros(silent.size + 1)
    for k in range(silent.size - 1, -1, -1):
        tail[k] = max(silent[k] + tail[k + 1], other[k] - cost)
    return tail


def _placed(law: Break, at: int, worth: float) -> Break:
    return Break(law.kind, at, law.late, law.turn, law.gain, law.noise, worth)


def _laws(
    model: FrameModel, order: NDArray[np.int64], y: Complex
) -> Iterator[tuple[Break, Floats]]:
    """All alternatives, each with its log-likelihood per period."""
    payload = model.tables.active_word[order] >= 0
    amplitude = model.tables.active_amplitude[order].astype(np.float64)
    yield from _gain_laws(model, order, y)
    # A law is -distance / N0 - constant: with more noise the distance weighs less.
    density = y.shape[1] * np.log(np.pi * model.noise)
    constant = density + np.where(payload, np.log(len(model.points)), 0.0)
    distance = -(model.as_sent(order, y) + constant)
    for ratio in (*_NOISES, *(1.0 / r for r in _NOISES)):
        likelihood = -distance / ratio - constant - y.shape[1] * np.log(ratio)
        yield Break("noise", 0, noise=ratio), likelihood
    yield Break("silence", 0), model.silent(y)
    yield from _shift_laws(model, order, payload, amplitude)


def _gain_laws(
    model: FrameModel, order: NDArray[np.int64], y: Complex
) -> Iterator[tuple[Break, Floats]]:
    channels = y.shape[1]
    model = replace(model, noise=model.noise + _GAIN_LEFT * model.signal)
    sets = [np.ones(channels)]
    if channels > 1:
        sets += list(np.eye(channels))
    for which in sets:
        for decibel in (*_GAINS, *(-g for g in _GAINS)):
            gain = np.power(10.0, which * decibel / 20.0)
            likelihood = model.as_sent(order, y / gain) - 2.0 * float(np.log(gain).sum())
            yield Break("gain", 0, gain=gain), likelihood


def _shift_laws(
    model: FrameModel,
    order: NDArray[np.int64],
    payload: NDArray[np.bool_],
    amplitude: Floats,
) -> Iterator[tuple[Break, Floats]]:
    """Which symbol comes when is not known then: payload may be any, known symbols unknown ones."""
    power = np.sum(np.abs(model.points) ** 2, axis=1) * amplitude[:, None] ** 2
    coarse = 2.0 * np.pi * np.arange(_TURNS) / _TURNS
    fine = np.array([*_FINE_TURNS, *(-t for t in _FINE_TURNS)])
    grids = [(step / _SHIFTS, coarse[step == 0 :], COARSE_LEFT) for step in range(_SHIFTS)]
    grids += [(0.0, fine, _FINE_LEFT)]
    grids += [(late, np.append(fine, 0.0), _FINE_LEFT) for late in _FINE_SHIFTS]
    for late, turns, left in grids:
        noise = model.noise + left * model.signal
        y = model.outputs(model.tables.active[order], -late * model.step)
        unknown = model.unknown(y)
        inner = 2.0 * (y @ model.points.conj().T) * amplitude[:, None]
        energy = np.sum(np.abs(y) ** 2, axis=1)
        base = y.shape[1] * np.log(np.pi * noise) + np.log(len(model.points))
        for turn in turns.tolist():
            near = np.real(inner * np.exp(-1j * turn)) - power
            likelihood = (near.max(axis=1) - energy) / noise - base
            law = Break("shift", 0, late=late, turn=turn)
            yield law, np.where(payload, likelihood, unknown)
