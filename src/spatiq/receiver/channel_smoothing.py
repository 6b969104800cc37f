"""Smoothing of a channel that moves: Wiener smoother over a frame, its Doppler spread by evidence.

Each coefficient is a Gaussian process with the autocorrelation of `slow_basis`. Given the moments
of what was sent (known, or expected under the posterior of the codewords), its posterior mean over
the frame is the linear minimum mean-square error estimate; the spread W is that of the largest
marginal likelihood (D. J. C. MacKay, Neural Comput. 4(3), 1992; from memory).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from spatiq.receiver.slow_basis import SlowBasis

Complex = NDArray[np.complex128]


@dataclass(frozen=True, eq=False)
class Moments:
    """Sums over blocks of symbol periods.

    Attributes:
        gram: complex128 (B, Nt, Nt); E[conj(x_a) x_b].
        cross: complex128 (B, Nr, Nt); y E[conj(x)].
        energy: sum over the frame of ||y||^2.
        periods: symbol periods that entered.
    """

    gram: Complex
    cross: Complex
    energy: float
    periods: int

    def over(self, blocks: int, factor: int) -> Moments:
        """The same over `blocks` blocks, each `factor` times as long."""
        if factor == 1:
            return self
        return Moments(
            _joined(self.gram, blocks, factor),
            _joined(self.cross, blocks, factor),
            self.energy,
            self.periods,
        )


def _joined(values: Complex, blocks: int, factor: int) -> Complex:
    starts = np.arange(blocks) * factor
    return np.asarray(np.add.reduceat(values, starts, axis=0), np.complex128)


@dataclass(frozen=True, eq=False)
class SmoothedChannel:
    """Posterior of the channel.

    Attributes:
        channels: complex128 (B, Nr, Nt); mean in each block.
        evidence: log marginal likelihood, up to what does not depend on the basis.
        volume: the part of evidence that does not depend on what was received.
        error: expected sum of ||y - H x||^2 that is left.
        freedom: effective number of parameters for each receive channel.
        antenna_energy: float64 (Nt,); N0 over it is the mean variance of the coefficients.
    """

    channels: Complex
    evidence: float
    volume: float
    error: float
    freedom: float
    antenna_energy: NDArray[np.float64]


def information(gram: Complex, basis: NDArray[np.float64]) -> Complex:
    """Sum over blocks of gram (B, Nt, Nt) times basis rows' outer products: (Nt Q, Nt Q)."""
    antennas, size = gram.shape[1], basis.shape[1]
    total = np.zeros((antennas, size, antennas, size), np.complex128)
    for a in range(antennas):
        for b in range(a, antennas):
            weight = gram[:, a, b]
            if not np.any(weight):
                continue
            part = (basis * weight[:, None]).T @ basis
            total[a, :, b, :] = part
            if a != b:
                total[b, :, a, :] = part.conj().T
    return total.reshape(antennas * size, antennas * size)


def projection(cross: Complex, basis: NDArray[np.float64]) -> Complex:
    """Sum over blocks of cross (B, Nr, Nt) times basis rows: (Nt Q, Nr)."""
    blocks, channels, antennas = cross.shape
    sums = basis.T @ cross.reshape(blocks, channels * antennas)
    sums = sums.reshape(basis.shape[1], channels, antennas)
    return np.asarray(sums.transpose(2, 0, 1).reshape(-1, channels), np.complex128)


def synthesis(coefficients: Complex, basis: NDArray[np.float64], antennas: int) -> Complex:
    """Channels (B, Nr, Nt) from coefficients (Nt Q, Nr)."""
    channels = coefficients.shape[1]
    each = coefficients.reshape(antennas, basis.shape[1], channels).transpose(1, 2, 0)
    made = basis @ each.reshape(basis.shape[1], channels * antennas)
    return np.asarray(made.reshape(len(basis), channels, antennas), np.complex128)


def smooth_channel(
    moments: Moments, basis: SlowBasis, noise: float, power: float
) -> SmoothedChannel:
    """Posterior mean of the channel over the basis' blocks.

    Args:
        moments: over the basis' blocks.
        basis: functions in which a coefficient of unit power is CN(0, I).
        noise: N0.
        power: prior mean power of a coefficient.
    """
    channels, antennas = moments.cross.shape[1:]
    scaled = basis.values * np.sqrt(power)
    gathered = information(moments.gram, scaled)
    right = projection(moments.cross, scaled)
    size = len(gathered)
    factor = scipy.linalg.cho_factor(gathered + noise * np.eye(size), lower=True)
    found = scipy.linalg.cho_solve(factor, right)
    fit = float(np.sum(right.conj() * found).real)
    logdet = 2 * float(np.sum(np.log(np.diag(factor[0]).real))) - size * np.log(noise)
    explained = np.sum(found.conj() * (gathered @ found)).real
    influence = np.diag(scipy.linalg.cho_solve(factor, gathered)).real.reshape(antennas, -1)
    energy = np.einsum("baa->a", moments.gram).real
    share = influence.sum(axis=1)
    with np.errstate(divide="ignore", invalid="ignore"):
        effective = np.where(share > 0, energy / np.maximum(share, 1e-300), 0.0)
    return SmoothedChannel(
        channels=synthesis(found, scaled, antennas),
        evidence=fit / noise - channels * logdet,
        volume=-channels * logdet,
        error=max(moments.energy - 2 * fit + float(explained), 0.0),
        freedom=float(influence.sum()),
        antenna_energy=effective,
    )
