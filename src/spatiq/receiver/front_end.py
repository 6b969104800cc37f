"""Front end: what the receiver's own mixer adds to a frame is estimated, taken out and told.

The refit's residuals of every frame give the image of each receive channel (I and Q branches that
differ in gain, or are not in quadrature) and its constant offset, with their variances
(`front_end_figures.py`). Where one is significant, the frame's samples are set right, and the frame
is refitted; what is left is estimated anew, for decisions improve. Frames without evidence are left
as they are, bit for bit: a correction costs a little of the noise.

Test: under the hypothesis of no image, |c|^2 over its variance is exponentially distributed with
mean 1 for long frames; so is a constant's. Each is taken for real beyond the quantile that chance
exceeds once in a million frames.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from spatiq.receiver.frame_batch import FrameBatch
from spatiq.receiver.front_end_figures import (
    FrontEndFigures,
    FrontEndSums,
    filter_gain,
    solve_sums,
)
from spatiq.receiver.front_end_kernels import LAGS, set_right
from spatiq.receiver.refit import Refit

CHANCE = 1e-6  # that a frame without image, or without constant, is corrected for one
IMAGE_CORRECTED, CONSTANT_CORRECTED = 1, 2
_ROUNDS = 3
FLOOR = 1e-5  # share of the signal below which rounding and pulse truncation follow no chance law
_LARGEST_IMAGE = 0.5  # image rejection 6 dB: beyond, estimates from decisions have run away


@dataclass(frozen=True, eq=False)
class FrontEnd:
    """The stage after the refit.

    Attributes:
        refit: run again on frames that were corrected.
        constant: complex128 (Nr,); what has been taken out of all samples already.
        expected: float64 (LAGS,); correlation of white noise after the matched filter.
    """

    refit: Refit
    constant: NDArray[np.complex128]
    expected: NDArray[np.float64] = field(default_factory=lambda: np.zeros(LAGS))

    def __call__(self, batch: FrameBatch) -> FrameBatch:
        """Correct what is significant; fill the front end's figures."""
        sums = batch.front_end_sums
        if sums is None:
            return batch
        figures = self._solve(batch, sums, slice(0, batch.count))
        batch.front_end = figures
        power = signal_power(batch)
        for i in np.flatnonzero(_significant(figures, power).any(axis=(0, 2))):
            self.correct(batch, int(i))
        figures.constant[:] += self.constant
        return batch

    def again(self, batch: FrameBatch, i: int) -> None:
        """Correct a frame further, whose samples were changed and which was refitted since."""
        if batch.front_end is not None:
            self.correct(batch, i)
            batch.front_end.constant[i] += self.constant

    def _solve(self, batch: FrameBatch, sums: FrontEndSums, frames: slice) -> FrontEndFigures:
        return solve_sums(
            sums.only(frames),
            batch.channel[frames],
            batch.noise[frames],
            self.refit.tables.active.size,
            filter_gain(self.refit.bank, batch.carrier[frames]),
            self.expected,
        )

    def correct(self, batch: FrameBatch, i: int) -> None:
        """Set a frame's samples right, as often as something significant is left."""
        figures, sums, here = batch.front_end, batch.front_end_sums, slice(i, i + 1)
        if figures is None or sums is None:
            return
        image, constant = figures.image_taken[i].copy(), figures.constant_taken[i].copy()
        left = self._solve(batch, sums, here)
        for _ in range(_ROUNDS):
            told_image, told_constant = _significant(left, signal_power(batch)[here])[:, 0]
            c = np.where(told_image, left.image[0], 0.0)
            d = np.where(told_constant, left.constant[0], 0.0)
            if not (c.any() or d.any()) or np.any(np.abs(c) > _LARGEST_IMAGE):
                break
            set_right(batch.planes[i], c, d, batch.carrier[i], batch.turns[i])
            constant = constant + d + image * d.conj()
            image = (image + c) / (1.0 + image.conj() * c)
            batch.corrected[i] |= IMAGE_CORRECTED * c.any() | CONSTANT_CORRECTED * d.any()
            self.refit.refit_frame(batch, i)
            left = self._solve(batch, sums, here)
        figures.enter(i, left.beyond(image[None], constant[None]))


def signal_power(batch: FrameBatch) -> NDArray[np.float64]:
    """Power of a sample (F, Nr), all antennas taken to send equally often."""
    used = np.maximum(np.count_nonzero(batch.antenna_energy, axis=1), 1)
    power = np.sum(np.abs(batch.channel) ** 2, axis=2) / (used * batch.step)[:, None]
    return np.asarray(power, np.float64)


def _significant(figures: FrontEndFigures, power: NDArray[np.float64]) -> NDArray[np.bool_]:
    """Whether image and constant are there, bool (2, F, Nr); `power` of a sample (F, Nr)."""
    limit = np.log(figures.image.shape[1] / CHANCE)
    with np.errstate(invalid="ignore"):
        return np.stack(
            [
                np.abs(figures.image) ** 2 > np.maximum(limit * figures.image_var, FLOOR),
                np.abs(figures.constant) ** 2
                > np.maximum(limit * figures.constant_var, FLOOR * power),
            ]
        )
