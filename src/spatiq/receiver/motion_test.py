"""Motion test: did the channel or the carrier's phase move within a frame, beyond what was fitted?

Score test (C. R. Rao, Proc. Camb. Phil. Soc. 44, 1948) on the residuals of a refit that took the
channel for constant and the phase for a straight line: they are regressed on orthogonal polynomials
of time, for each channel coefficient (orders 1 to 3) and for the phase common to all (orders 2 to
5). Where nothing moved, the statistics are chi-square. Words in doubt count with their mean, which
makes residuals scatter more than noise does: the channel's statistic must also stand out against
what the residuals show at higher orders (F test). A frame in which the receiver lost its track
altogether shows by payload noise above that of the known symbols.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.linalg
import scipy.stats
from numpy.polynomial import legendre
from numpy.typing import NDArray

from spatiq.receiver.frame_batch import MOTION_PARTS, FrameBatch
from spatiq.signal.codebooks import Codebook

CHANCE = 1e-4  # of looking closer at a frame in which nothing moved, for each of three tests
_CHANNEL_ORDERS, _PHASE_ORDERS = 4, 6  # polynomials, constant included
# Residuals below an EVM of -50 dB are the pulse's own and rounding, which no chance law describes.
_FLOOR = 1e-5


@dataclass(frozen=True, eq=False)
class MotionTest:
    """The test for one link.

    Attributes:
        codebook: codewords.
        payload: Kp, payload periods.
    """

    codebook: Codebook
    payload: int

    def __call__(self, batch: FrameBatch) -> NDArray[np.bool_]:
        """Frames that deserve a closer look, bool (F,)."""
        if not batch.count:
            return np.zeros(0, np.bool_)
        slow, freedom, fast, rest = self.channel_statistic(batch)
        moved = slow > scipy.stats.chi2.isf(CHANCE, np.maximum(freedom, 1))
        limit = scipy.stats.f.isf(CHANCE, np.maximum(freedom, 1), np.maximum(rest, 1))
        moved &= slow * rest > limit * freedom * fast
        moved |= phase_statistic(batch) > scipy.stats.chi2.isf(CHANCE, _PHASE_ORDERS - 2)
        known = 2 * max(batch.header_freedom, 1)
        payload = 2 * self.payload * batch.channel.shape[1]
        limit = scipy.stats.f.isf(CHANCE, payload, known)
        moved |= batch.noise > limit * np.maximum(batch.header_noise, _floored(batch))
        return np.asarray(moved & np.isfinite(batch.noise), np.bool_)

    def channel_statistic(
        self, batch: FrameBatch
    ) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
        """Chi-square statistics (F,) of channel coefficients that move slowly, and of all that they
        do faster than that; each with its freedom (F,)."""
        frames, parts, channels, antennas = batch.motion_scores.shape
        along = batch.motion_scores.reshape(frames, parts, channels * antennas)
        projected = _POLYNOMIALS[:, :_CHANNEL_ORDERS].T @ along
        projected = projected.reshape(frames, _CHANNEL_ORDERS, channels, antennas)
        lower = _roots(batch.motion_energy, _CHANNEL_ORDERS)
        solved = np.linalg.solve(lower, projected.transpose(0, 3, 1, 2))[:, :, 1:]
        scores = np.asarray(solved.reshape(frames, antennas, -1), np.complex128)
        white = self._uncorrelated(scores)
        noise = np.maximum(batch.noise, _floored(batch))
        used = np.count_nonzero(batch.motion_energy.sum(axis=1) > 0, axis=1)
        freedom = 2.0 * channels * (_CHANNEL_ORDERS - 1) * used
        slow = 2.0 * np.sum(np.abs(white) ** 2, axis=(1, 2)) / noise
        fast = (
            2.0 * _scatter(batch) / noise
            - 2.0 * np.sum(np.abs(solved) ** 2, axis=(1, 2, 3)) / noise
        )
        heard = np.count_nonzero(batch.motion_energy > 0, axis=(1, 2))
        rest = np.maximum(2.0 * channels * (heard - _CHANNEL_ORDERS * used), 1.0)
        return slow, freedom, np.maximum(fast, 0.0), rest

    def _uncorrelated(self, scores: NDArray[np.complex128]) -> NDArray[np.complex128]:
        """Scores (F, Nt, n) of antennas that send together, made independent."""
        vectors = self.codebook.vectors
        gram = vectors.T @ vectors.conj() / len(vectors)
        power = np.sqrt(np.maximum(np.diag(gram).real, 1e-300))
        correlation = gram / np.outer(power, power)
        np.fill_diagonal(correlation, 1.0)
        if np.allclose(correlation, np.eye(len(power))):
            return scores
        values, axes = scipy.linalg.eigh(correlation)
        root = np.where(values > 1e-6, 1.0 / np.sqrt(np.maximum(values, 1e-6)), 0.0)
        return np.asarray((axes * root) @ axes.conj().T @ scores, np.complex128)


def phase_statistic(batch: FrameBatch) -> NDArray[np.float64]:
    """Chi-square statistic (F,) of a common phase that leaves its straight line."""
    turned = np.sum(batch.channel[:, None].conj() * batch.motion_scores, axis=(2, 3)).imag
    projected = _POLYNOMIALS.T @ turned[:, :, None]
    lower = _roots(batch.motion_reference[:, :, None], _PHASE_ORDERS)[:, 0]
    white = np.linalg.solve(lower, projected)[:, 2:, 0]
    noise = np.maximum(batch.noise, _floored(batch))
    return np.asarray(np.sum(white**2, axis=1) / (noise / 2), np.float64)


def _scatter(batch: FrameBatch) -> NDArray[np.float64]:
    """Scatter of the parts' scores about their mean, in units of what they are worth, (F,)."""
    energy = np.maximum(batch.motion_energy, 1e-30)[:, :, None]
    scores = np.where(batch.motion_energy[:, :, None] > 0, batch.motion_scores, 0.0)
    total = np.sum(np.abs(scores) ** 2 / energy, axis=(1, 2, 3))
    whole = np.abs(scores.sum(axis=1)) ** 2 / energy.sum(axis=1)
    return np.asarray(total - np.sum(whole, axis=(1, 2)), np.float64)


def _floored(batch: FrameBatch) -> NDArray[np.float64]:
    """Noise that a frame must exceed for its residuals to mean anything, (F,)."""
    energy = np.sum(np.abs(batch.channel) ** 2, axis=1) * batch.antenna_energy
    periods = np.maximum(batch.antenna_energy.sum(axis=1), 1e-300)
    floor = _FLOOR * energy.sum(axis=1) / (periods * batch.channel.shape[1])
    return np.asarray(np.maximum(floor, 1e-30), np.float64)


def _polynomials() -> NDArray[np.float64]:
    """Legendre polynomials at the parts' centres, (J, orders)."""
    centres = (2.0 * np.arange(MOTION_PARTS) + 1.0) / MOTION_PARTS - 1.0
    return np.asarray(legendre.legvander(centres, _PHASE_ORDERS - 1), np.float64)


_POLYNOMIALS = _polynomials()


def _roots(weight: NDArray[np.float64], orders: int) -> NDArray[np.float64]:
    """Cholesky factors (F, n, orders, orders) of the polynomials' Gram matrices by weights."""
    frames, parts, count = weight.shape
    basis = _POLYNOMIALS[:, :orders]
    pairs = (basis[:, :, None] * basis[:, None, :]).reshape(parts, orders * orders)
    grams = (pairs.T @ weight).transpose(0, 2, 1).reshape(frames, count, orders, orders)
    # An antenna that few parts hear leaves directions without energy.
    ridge = 1e-9 * grams[:, :, 0, 0] + 1e-30
    roots = np.linalg.cholesky(grams + ridge[:, :, None, None] * np.eye(orders))
    return np.asarray(roots, np.float64)
