"""Least-squares fit of gain, phase, carrier and timing before modulation accuracy is taken.

Each antenna has its own complex gain at each receive channel, all have one carrier and one timing;
nothing follows the phase along the frame, so that phase noise stays in the error vectors.

Source: 3GPP TS 36.104, annex E: error vectors after a least-squares choice of frequency, timing,
phase and amplitude (from memory); here with a gain for each antenna path.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

Complex = NDArray[np.complex128]
Floats = NDArray[np.float64]
_ROUNDS = 4


@dataclass(frozen=True, eq=False)
class Fit:
    """F frames of K symbol periods after the fit.

    Attributes:
        received: complex128 (F, K, Nr); carrier and timing set right.
        gain: complex128 (F, Nr, Nt); least squares, zero for antennas that sent nothing.
        reference: complex128 (F, K, Nr); what the gains make of what was sent.
        active: bool (F, K); periods in which something was sent.
        carrier: float64 (F,); carrier offset that was taken out, radians per symbol period.
        timing: float64 (F,); timing offset, symbol periods.
        sent: complex128 (F, K, Nt); as given.
        projector: see `beside`.
        freedom: complex degrees of freedom of a frame's error vectors over those of K active
            periods, (F,): what the fit has taken is (1 - freedom).
        slope: complex128 (F, K, Nr); derivative of `received` by time, per symbol period.
        clock: float64 (F,); how much longer the symbol period is than the one sampled with; not
            taken out.
    """

    received: Complex
    gain: Complex
    reference: Complex
    active: NDArray[np.bool_]
    carrier: Floats
    timing: Floats
    sent: Complex
    projector: Complex
    freedom: Floats
    slope: Complex
    clock: Floats

    @property
    def error(self) -> Complex:
        """Error vectors (F, K, Nr), zero in silent periods."""
        return np.where(self.active[..., None], self.received - self.reference, 0.0)

    def beside(self, regressor: Complex) -> Complex:
        """A regressor (F, K, Nr) less what the gains would take of it."""
        return np.asarray(regressor - self.sent @ (self.projector @ regressor))

    def amount(self, regressor: Complex) -> tuple[Floats, Floats]:
        """Real amount of a regressor (F, K, Nr) in the error vectors, as numerator and weight."""
        own = self.beside(regressor)
        return np.einsum("fkr,fkr->f", own.conj(), self.error).real, _energy(own)


def _energy(values: Complex) -> Floats:
    return np.asarray(np.sum(np.abs(values) ** 2, axis=(1, 2)))


def projectors(sent: Complex) -> Complex:
    """Least-squares gains from received vectors: complex128 (F, Nt, K); silent antennas: zero."""
    adjoint = sent.conj().transpose(0, 2, 1)
    return np.asarray(np.linalg.pinv(adjoint @ sent, rcond=1e-9, hermitian=True) @ adjoint)


def position(active: NDArray[np.bool_]) -> Floats:
    """Place of each period in its frame, -1 to 1 from the first to the last active one."""
    k = np.arange(active.shape[1])
    first, last = k[active.any(axis=0)][[0, -1]] if active.any() else (0, 1)
    return np.asarray((2 * k - first - last) / max(last - first, 1), np.float64)


def fit_frames(looks: Complex, sent: Complex, step: float) -> Fit:
    """The fit.

    Args:
        looks: complex128 (3, F, K, Nr); matched-filter outputs `step` early, on time and late.
        sent: complex128 (F, K, Nt); what was sent.
        step: symbol periods.
    """
    active = np.any(sent != 0, axis=2)
    projector = projectors(sent)
    centred = np.arange(sent.shape[1]) - (sent.shape[1] - 1) / 2
    carrier, timing = np.zeros((2, sent.shape[0]))
    for _ in range(_ROUNDS):
        turned = looks * np.exp(-1j * carrier[:, None] * centred)[None, :, :, None]
        timing = _timing(turned, sent, projector, active, step)
        received = _between(turned, timing / step)
        gain = projector @ received
        reference = sent @ gain
        error = np.where(active[..., None], received - reference, 0.0)
        slope = 1j * centred[None, :, None] * reference
        slope = slope - sent @ (projector @ slope)
        weight = _energy(slope)
        found = np.einsum("fkr,fkr->f", slope.conj(), error).real
        carrier += np.divide(found, weight, out=np.zeros_like(found), where=weight > 0)
    channels = looks.shape[3]
    used = np.any(sent != 0, axis=1).sum(axis=1) + 1.0 / max(channels, 1)
    freedom = 1.0 - used / np.maximum(active.sum(axis=1), 1)
    fit = Fit(
        received,
        np.asarray(gain.transpose(0, 2, 1)),
        reference,
        active,
        carrier,
        timing,
        sent,
        projector,
        np.maximum(freedom, 1e-3),
        (turned[2] - turned[0]) / (2 * step),
        np.zeros_like(timing),
    )
    # A pulse that comes later than it is sampled shows an earlier part of its shape.
    found, weight = fit.amount(
        -centred[None, :, None] * np.where(fit.active[..., None], fit.slope, 0)
    )
    return replace(fit, clock=np.divide(found, weight, out=np.zeros_like(found), where=weight > 0))


def _timing(
    looks: Complex, sent: Complex, projector: Complex, active: NDArray[np.bool_], step: float
) -> Floats:
    """Where the error energy, a parabola near its least, is least; at most three steps away."""
    left = np.array(
        [_energy(np.where(active[..., None], y - sent @ (projector @ y), 0.0)) for y in looks]
    )
    bend = left[0] - 2 * left[1] + left[2]
    tilt = (left[0] - left[2]) / 2
    place = np.divide(tilt, bend, out=np.zeros_like(tilt), where=bend > 0)
    return np.asarray(np.clip(place, -3, 3) * step)


def _between(looks: Complex, place: Floats) -> Complex:
    """Quadratic interpolation of three looks at `place` steps from the middle one."""
    p = place[:, None, None]
    return np.asarray(
        looks[1] + p * (looks[2] - looks[0]) / 2 + p**2 * (looks[0] - 2 * looks[1] + looks[2]) / 2
    )
