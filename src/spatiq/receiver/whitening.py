"""Whitening: noise that differs between the receive channels, or is correlated over them.

The refit's residuals show the noise covariance R. Where they say that it is no multiple of the
identity, samples and channel are turned to W y with W R W^H = N0 I, and the frame is refitted:
every stage after this one may take the noise for white. Where the noise is white nothing is
changed, for an estimated R costs a little.

Test: likelihood ratio for sphericity (J. W. Mauchly, Ann. Math. Statist. 11(2), 1940; complex form:
T. W. Anderson, "An Introduction to Multivariate Statistical Analysis", ch. 10; from memory).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import scipy.stats
from numpy.typing import NDArray

from spatiq.receiver.channel_following import ChannelFollowing
from spatiq.receiver.frame_batch import FrameBatch

_CHANCE = 1e-6  # that white noise is taken for coloured, per frame
ROUNDS = 3  # decisions improve with whitening, and the estimate of the noise with them
_DEAD = 1e-9  # share of the largest noise below which a direction carries nothing at all


@dataclass(frozen=True, eq=False)
class Whitening:
    """The stage; `following` refits frames that were whitened, moving ones and others."""

    following: ChannelFollowing

    def __call__(self, batch: FrameBatch) -> FrameBatch:
        """Whiten what is not white; fill whitener and coloured."""
        channels = batch.channel.shape[1]
        if channels < 2:
            return batch
        limit = uneven_beyond(channels)
        for i in range(batch.count):
            periods = self.following.refit.tables.active.size - np.count_nonzero(
                batch.antenna_energy[i]
            )
            for _ in range(ROUNDS):
                if unevenness(batch.residual[i], int(periods)) <= limit:
                    break
                whiten_frame(batch, i, batch.residual[i], self.following.refit_frame)
        return batch


def whiten_frame(
    batch: FrameBatch,
    i: int,
    covariance: NDArray[np.complex128],
    refit_frame: Callable[[FrameBatch, int], None],
) -> None:
    """Turn frame i to white noise, of the covariance given before (Nr, Nr), and refit it."""
    whitener, alive = whitening_matrix(covariance)
    real, imag = batch.planes[i, :, 0], batch.planes[i, :, 1]
    turned = whitener.astype(np.complex64) @ (real + 1j * imag)
    batch.planes[i, :, 0], batch.planes[i, :, 1] = turned.real, turned.imag
    batch.channel[i] = whitener @ batch.channel[i]
    if batch.moving and (moving := batch.moving[i]) is not None:
        batch.moving[i] = moving.through(whitener)
    batch.whitener[i], batch.coloured[i] = whitener @ batch.whitener[i], True
    refit_frame(batch, i)
    if alive < batch.channel.shape[1]:
        # Directions without any noise or signal are no degrees of freedom.
        batch.noise[i] *= batch.channel.shape[1] / alive


def uneven_beyond(channels: int) -> float:
    """Statistic of `unevenness` that white noise over Nr channels passes by rare chance only."""
    return float(scipy.stats.chi2.isf(_CHANCE, channels * channels - 1))


def unevenness(covariance: NDArray[np.complex128], periods: int) -> float:
    """Statistic of a covariance (Nr, Nr) of so many vectors: chi-square of Nr^2 - 1 when white."""
    size = covariance.shape[0]
    values = np.linalg.eigvalsh(covariance)
    if values[-1] <= 0:
        return 0.0
    if values[0] <= _DEAD * values[-1]:
        return float("inf")
    uneven = size * np.log(values.mean()) - np.sum(np.log(values))
    return float(2.0 * (periods - (2 * size * size + 1) / (6.0 * size)) * uneven)


def sphericity(covariance: NDArray[np.complex128], periods: int) -> float:
    """Probability that white noise shows a covariance (Nr, Nr) so uneven over so many vectors."""
    freedom = covariance.shape[0] ** 2 - 1
    return float(scipy.stats.chi2.sf(unevenness(covariance, periods), freedom))


def whitening_matrix(
    covariance: NDArray[np.complex128],
) -> tuple[NDArray[np.complex128], int]:
    """W (Nr, Nr) with W R W^H = mean noise times the identity, and how many directions live."""
    values, vectors = np.linalg.eigh(covariance)
    alive = values > _DEAD * values[-1]
    root = np.where(alive, np.sqrt(values.mean() / np.where(alive, values, 1.0)), 0.0)
    return (vectors * root) @ vectors.conj().T, int(alive.sum())
