"""First look at a frame that moves, when decisions on a still channel have failed.

Where known symbols are interspersed in the payload: the channel is interpolated between them.
Where they stand together: it is followed from them on by decisions, outwards in short pieces. What
has been decided adds to the information about the slow functions of which the channel is made up,
and these carry it on to the next piece: a Kalman filter whose state, the functions' coefficients,
stands still. The common phase is a second, scalar one.
"""

from __future__ import annotations

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from spatiq.receiver.channel_smoothing import Complex, Moments, information, projection, synthesis
from spatiq.receiver.frame_fit import FrameFit
from spatiq.receiver.frame_posterior import Posterior, moments, posterior
from spatiq.receiver.moving_channel import Following

_KEPT = 0.1  # of the information, when a frame is gone through again
_PIECE, _WALKING_PIECE = 16, 8  # symbol periods decided at a time: the phase is one in them


def interpolate(fit: FrameFit) -> None:
    """Channel from all known symbols of the frame."""
    tables, blocks = fit.plan.tables, fit.plan.blocks
    known = np.flatnonzero(tables.active_word < 0)
    low, high = blocks.block[known[0]], blocks.block[known[-1]] + 1
    straight = fit.straightened()[known]
    expected = posterior(straight, known, blocks, fit.channels[low:high], fit.noise, tables)
    part = moments(straight, expected, known, blocks)
    before_after = ((low, blocks.count - high), (0, 0), (0, 0))
    gram, cross = np.pad(part.gram, before_after), np.pad(part.cross, before_after)
    fit.fit_channel(Moments(gram, cross, part.energy, part.periods))
    fit.following = Following.INTERPOLATED


def follow(fit: FrameFit, bandwidth: float, walk: float) -> None:
    """Channel and phase by decisions, from the header outwards."""
    tables = fit.plan.tables
    header = np.flatnonzero(tables.in_header == 1)
    track = _Track(fit, bandwidth, walk, header)
    outside = tables.in_header == 0
    for order in (
        np.flatnonzero(outside & (tables.active > tables.header_centroid)),
        np.flatnonzero(outside & (tables.active < tables.header_centroid))[::-1],
    ):
        track.restart()
        piece = _PIECE if walk == 0.0 else _WALKING_PIECE
        for first in range(0, order.size, piece):
            track.take(np.sort(order[first : first + piece]))
    if walk > 0.0:
        # With columns that the payload has put right, from the first symbol on.
        track.forget()
        every = np.arange(tables.active.size)
        for first in range(0, every.size, piece):
            track.take(every[first : first + piece])
    fit.channels = fit.plan.spread(track.channels())
    fit.bandwidth, fit.walk = bandwidth, walk


class _Track:
    """Information gathered so far about the channel's slow functions, and the phase."""

    def __init__(
        self, fit: FrameFit, bandwidth: float, walk: float, header: NDArray[np.int64]
    ) -> None:
        self._fit, self._walk = fit, walk
        plan = fit.plan
        self._factor = plan.factor(bandwidth)
        sent = plan.tables.known_vectors[header]
        energy = (
            float(np.sum(np.abs(fit.y[header]) ** 2)) - header.size * fit.noise * fit.y.shape[1]
        )
        scale = max(float(np.sum(np.abs(sent) ** 2)) * fit.y.shape[1], 1e-300)
        power = max(energy, 0.1 * float(np.sum(np.abs(fit.y[header]) ** 2))) / scale
        self._basis = plan.basis(bandwidth).values * np.sqrt(power)
        self._antennas = plan.tables.codebook.antennas
        size = self._antennas * self._basis.shape[1]
        self._information = fit.noise * np.eye(size, dtype=np.complex128)
        self._projection = np.zeros((size, fit.y.shape[1]), np.complex128)
        self._angle = self._start = 0.0
        low, high = plan.blocks.block[header[0]], plan.blocks.block[header[-1]] + 1
        self._variance_of = np.zeros(self._antennas)
        self._enter(header, fit.channels[low:high])
        self._doubt_phases(header)

    def restart(self) -> None:
        """Begin at the header again."""
        self._angle, self._variance = self._start, 0.0

    def forget(self) -> None:
        """Keep what has been learnt as a mean, hardly as information; the phase is open again."""
        noise = self._fit.noise * np.eye(len(self._information))
        said, _ = self._solved()
        self._information = _KEPT * (self._information - noise) + noise
        self._projection = self._information @ said
        self._angle, self._variance = 0.0, np.pi**2 / 3

    def _enter(self, periods: NDArray[np.int64], channels: Complex) -> None:
        """Add what the periods' expected words say."""
        fit = self._fit
        straight = self._straight(periods)
        expected = self._expected(periods, straight, channels)
        found = moments(straight, expected, periods, fit.plan.blocks)
        part = self._basis[self._rows(periods)]
        self._information += information(found.gram, part)
        self._projection += projection(found.cross, part)

    def _straight(self, periods: NDArray[np.int64]) -> Complex:
        fit = self._fit
        return np.asarray(fit.y[periods] * np.exp(-1j * fit.phase[periods])[:, None])

    def _expected(
        self, periods: NDArray[np.int64], straight: Complex, channels: Complex
    ) -> Posterior:
        fit = self._fit
        plan = fit.plan
        return posterior(
            straight, periods, plan.blocks, channels, fit.noise, plan.tables, self._variance_of
        )

    def _rows(self, periods: NDArray[np.int64]) -> NDArray[np.int64]:
        """Rows of the basis for each finest block from the first period's to the last one's."""
        block = self._fit.plan.blocks.block
        return np.arange(block[periods[0]], block[periods[-1]] + 1) // self._factor

    def _doubt_phases(self, header: NDArray[np.int64]) -> None:
        """Antennas heard at different times: between them the phase has walked, unseen.

        Their information is taken down to what that leaves; what it says stays.
        """
        plan = self._fit.plan
        energy = np.abs(plan.tables.known_vectors[header].astype(np.complex128)) ** 2
        total = energy.sum(axis=0)
        place = plan.tables.active[header] @ energy / np.maximum(total, 1e-300)
        away = np.abs(place - place[total > 0].max())
        channel = np.mean(np.abs(self._fit.channels[0]) ** 2, axis=0)
        walked = self._walk * away * channel * total / self._fit.noise
        share = np.repeat(1.0 / np.sqrt(1.0 + walked), self._basis.shape[1])
        said, _ = self._solved()
        fresh = self._information - self._fit.noise * np.eye(len(share))
        self._information = fresh * np.outer(share, share) + self._fit.noise * np.eye(len(share))
        self._projection = self._information @ said

    def _solved(self) -> tuple[Complex, Complex]:
        """Coefficients (Nt Q, Nr), and the inverse of their information."""
        size = len(self._information)
        factor = scipy.linalg.cho_factor(self._information, lower=True)
        inverse = scipy.linalg.cho_solve(factor, np.eye(size))
        return np.asarray(inverse @ self._projection, np.complex128), inverse

    def _predicted(self, part: NDArray[np.float64]) -> Complex:
        """Channels of some blocks, rows of the basis; their variance is kept."""
        found, inverse = self._solved()
        size, row = part.shape[1], part[len(part) // 2]
        each = inverse.reshape(self._antennas, size, self._antennas, size)
        own = np.einsum("amab,m,b->a", each, row, row).real
        self._variance_of = self._fit.noise * own
        return synthesis(found, part, self._antennas)

    def channels(self) -> Complex:
        """Channels over the basis' blocks, (B, Nr, Nt)."""
        return synthesis(self._solved()[0], self._basis, self._antennas)

    def take(self, periods: NDArray[np.int64]) -> None:
        """Decide a piece: phase first, then what it says of the channel."""
        part = self._basis[self._rows(periods)]
        channels = self._predicted(part)
        if self._walk > 0.0:
            self._follow_phase(periods, channels)
        self._enter(periods, channels)

    def _follow_phase(self, periods: NDArray[np.int64], channels: Complex) -> None:
        """The phase of a piece, a constant: its posterior mean, decisions made twice."""
        fit, block = self._fit, self._fit.plan.blocks.block[periods]
        variance = self._variance + self._walk * periods.size
        expected_angle = self._angle
        for _ in range(2):
            fit.phase[periods] = self._angle
            straight = self._straight(periods)
            mean = self._expected(periods, straight, channels).mean
            reference = np.einsum("kra,ka->kr", channels[block - block[0]], mean)
            weight = 2.0 / fit.noise * float(np.sum(np.abs(reference) ** 2))
            error = 2.0 / fit.noise * float(np.sum(reference.conj() * straight).imag)
            self._variance = 1.0 / (1.0 / variance + weight)
            pull = error + weight * (self._angle - expected_angle)
            self._angle = expected_angle + self._variance * pull
        fit.phase[periods] = self._angle
