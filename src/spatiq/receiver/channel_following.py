"""Channel following: the third look, at frames in which channel or phase moved.

Only where the motion test finds evidence after the refit. Such a frame is fitted anew with a
channel and a phase that move (`frame_fit`): from the refit's decisions where these hold, else from
a first look of its own (`first_look`). Kept only when the evidence for motion is beyond `_BAYES`;
otherwise the frame stays as the refit left it, bit for bit.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from spatiq.receiver.alignment import kept, one_frame, restore
from spatiq.receiver.column_phase import turn_columns
from spatiq.receiver.first_look import follow, interpolate
from spatiq.receiver.frame_batch import FrameBatch
from spatiq.receiver.frame_fit import FittingPlan, FrameFit, fitting_plan
from spatiq.receiver.motion_test import MotionTest
from spatiq.receiver.moving_channel import MovingChannel
from spatiq.receiver.refit import Refit
from spatiq.receiver.tracking import Tracking

_BAYES = float(np.log(1e4))  # evidence for motion over evidence for standing still
# Payload noise over that of the known symbols: up to the first, the refit's decisions are trusted;
# beyond the second, they are of no use.
_SOUND, _HOPELESS = 1.2, 3.0
_TURNS = 3
_SLIPPERY = 2 * np.pi * 2e-5  # walk, radians^2 per period, from which cycle slips are looked for
_FIRST_ROUNDS, _LAST_ROUNDS = 4, 6
# Doppler spreads and phase walk (radians^2 per period) supposed at the first look.
_BANDWIDTH, _LITTLE, _WALK = 2e-4, 2e-5, 2 * np.pi * 1e-4
# What is free: the channel to move, the phase to walk.
_MOVES, _WALKS, _BOTH = (True, False), (False, True), (True, True)


def channel_following(refit: Refit, payload: int) -> ChannelFollowing:
    """The stage after a refit, for frames of so many payload periods."""
    plan = fitting_plan(refit.tables, refit.bank, refit.clock_std)
    common = (refit.bank, refit.tables, refit.clock_std, _WALK / 2)
    walking = (Tracking(*common), Refit(*common))
    return ChannelFollowing(refit, plan, MotionTest(refit.tables.codebook, payload), walking)


@dataclass(frozen=True, eq=False)
class ChannelFollowing:
    """The stage.

    Attributes:
        refit: stage before; refits frames that stand still.
        plan: blocks and bases.
        test: motion test.
        walking: tracking and refit that take the phase for walking.
    """

    refit: Refit
    plan: FittingPlan
    test: MotionTest
    walking: tuple[Callable[[FrameBatch], FrameBatch], ...]

    def __call__(self, batch: FrameBatch) -> FrameBatch:
        """Fit what moved; fill moving."""
        suspects = np.flatnonzero(self.test(batch))
        # Of frames with delayed antennas the test has seen the refit, which knows nothing of them.
        suspects = suspects[[int(i) not in batch.matched for i in suspects]]
        if suspects.size:
            batch.moving = [None] * batch.count
            for i in suspects:
                self._look_closer(batch, int(i))
            if not any(batch.moving):
                batch.moving = []
        return batch

    def refit_frame(self, batch: FrameBatch, i: int) -> None:
        """Refit a frame whose samples and channel were changed alike."""
        moving = batch.moving[i] if batch.moving else None
        if moving is None:
            self.refit.refit_frame(batch, i)
            return
        fit = self._fit(batch, i)
        fit.channels = self.plan.spread(moving.channels)
        fit.bandwidth, fit.walk = moving.bandwidth, moving.walk
        fit.refine(_LAST_ROUNDS)
        fit.following = moving.following
        self._enter(batch, i, fit)

    def _fit(self, batch: FrameBatch, i: int) -> FrameFit:
        """A fit that begins where the refit ended."""
        channels = np.repeat(batch.channel[i][None], self.plan.blocks.count, axis=0)
        return FrameFit(
            plan=self.plan,
            planes=batch.planes[i],
            timing=np.array([batch.t0[i], batch.step[i], batch.timing_var[i], batch.step_var[i]]),
            phase=batch.phase[i].astype(np.float64),
            channels=channels,
            noise=float(batch.noise[i]),
        )

    def _fresh(self, batch: FrameBatch, i: int) -> FrameFit:
        """A fit that begins where acquisition ended."""
        fit = self._fit(batch, i)
        fit.timing = np.array([*batch.acquired_timing[i], 0.0, 0.0])
        fit.channels = np.repeat(batch.acquired_channel[i][None], self.plan.blocks.count, axis=0)
        fit.phase = np.zeros(self.plan.tables.active.size)
        fit.noise = float(batch.header_noise[i])
        fit.sample()
        return fit

    def _look_closer(self, batch: FrameBatch, i: int) -> None:
        """Fit the frame from several starts; keep the best if it beats standing still."""
        excess = float(batch.noise[i] / batch.header_noise[i])
        fits = []
        if excess <= _HOPELESS:
            fits += [_refined(self._fit(batch, i), *free) for free in (_MOVES, _WALKS)]
        if excess > _SOUND:
            fits.append(_refined(self._tracked(batch, i), *_WALKS))
            lost = bool(fits[-1].noise > _SOUND * batch.header_noise[i])
            if lost:
                fits.append(_refined(self._glimpse(batch, i), *_MOVES))
            # Where the phase walks fast the track may have slipped, which leaves no noise behind.
            if lost or fits[-1].walk > _SLIPPERY:
                fits.append(_refined(self._followed(batch, i), *_BOTH))
                fits += self._turned(fits[-1], _SOUND * float(batch.header_noise[i]))
        best = max(fits, key=lambda fit: fit.score)
        others = [free for free in (_MOVES, _WALKS, _BOTH) if free != best.freedoms]
        trials = [best.copy(), *(best.copy() for _ in others)]
        for fit, free in zip(trials, [best.freedoms, *others], strict=True):
            _refined(fit, *free)
        best = max(trials, key=lambda fit: fit.score)
        best.refine(_LAST_ROUNDS)
        if best.evidence_gain > _BAYES:
            self._enter(batch, i, best)

    def _glimpse(self, batch: FrameBatch, i: int) -> FrameFit:
        """First look at a channel that moves: interpolated where known symbols allow it."""
        tables = self.plan.tables
        fit = self._fresh(batch, i)
        if np.any((tables.active_word < 0) & (tables.in_header == 0)):
            interpolate(fit)
        else:
            follow(fit, _BANDWIDTH, 0.0)
        return fit

    def _tracked(self, batch: FrameBatch, i: int) -> FrameFit:
        """First look by the ordinary track and refit, told that the phase walks."""
        frame = one_frame(batch, i)
        before = kept(frame)
        frame.t0[0], frame.step[0] = batch.acquired_timing[i]
        frame.channel[0], frame.noise[0] = batch.acquired_channel[i], batch.header_noise[i]
        frame.phase[0] = 0.0
        for stage in self.walking:
            frame = stage(frame)
        fit = self._fit(batch, i)
        restore(frame, before)
        return fit

    def _turned(self, fit: FrameFit, limit: float) -> list[FrameFit]:
        """The same with columns turned that were locked to a wrong angle; none if all was well."""
        other = fit.copy()
        for _ in range(_TURNS):
            if other.noise <= limit or not turn_columns(other):
                break
            other = _refined(other, *_WALKS)
        return [other] if other.score > fit.score else []

    def _followed(self, batch: FrameBatch, i: int) -> FrameFit:
        """First look at a phase that walks, on a channel that may move."""
        fit = self._fresh(batch, i)
        follow(fit, _LITTLE, _WALK)
        return fit

    def _enter(self, batch: FrameBatch, i: int, fit: FrameFit) -> None:
        """Hand a frame's estimates to the batch."""
        tables = self.plan.tables
        batch.t0[i], batch.step[i], batch.timing_var[i], batch.step_var[i] = fit.timing
        batch.phase[i], batch.noise[i] = fit.phase, fit.noise
        batch.antenna_energy[i] = fit.antenna_energy
        straight = fit.straightened()
        sent = straight[tables.payload] / tables.symbol_amplitude[tables.payload][:, None]
        batch.symbols[i] = sent
        batch.residual[i] = _residual(fit, straight)
        factor = self.plan.factor(fit.bandwidth)
        block = self.plan.blocks.block[tables.payload] // factor
        channels = fit.channels[::factor]
        moving = MovingChannel(channels, block, fit.following, fit.bandwidth, fit.walk)
        batch.moving[i] = moving
        batch.channel[i] = channels[block[block.size // 2]]
        slope = float(np.polyfit(tables.active, fit.phase, 1)[0])
        batch.carrier_estimate[i] = batch.carrier[i] + slope / (2 * np.pi * batch.step[i])


def _refined(
    fit: FrameFit, may_move: bool, may_walk: bool, rounds: int = _FIRST_ROUNDS
) -> FrameFit:
    """The fit after some rounds with what is free."""
    fit.may_move, fit.may_walk = may_move, may_walk
    fit.refine(rounds)
    return fit


def _residual(fit: FrameFit, straight: NDArray[np.complex128]) -> NDArray[np.complex128]:
    """Covariance of y - H E[x] over the channels, (Nr, Nr), trace Nr N0."""
    error = straight - fit.references()
    covariance = error.T @ error.conj()
    trace = float(np.trace(covariance).real)
    scale = len(covariance) * fit.noise / trace if trace > 0 else 0.0
    return np.asarray(covariance * scale, np.complex128)
