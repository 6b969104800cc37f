"""Dispersive channel of a frame: a finite impulse response for each pair of antennas.

Behind the matched filter, sampled once a symbol period, a dispersive channel is

    y[k] = sum over lags l = first..last of G[l] x[k - l] + noise,

G complex (Nr, Nt). Lags below 0 are there because the instants are those of the strongest path, not
of the first, and because the pulse of a path that falls between two instants has both its flanks
sampled. The noise stays white: samples of a root-Nyquist matched filter one symbol period apart are
uncorrelated (G. D. Forney, "Maximum-likelihood sequence estimation of digital sequences in the
presence of intersymbol interference", IEEE Trans. Inform. Theory 18(3), 1972, from memory). With
one sample a symbol period the channel beyond half the symbol rate is folded back, as is usual.

Estimation is least squares (S. N. Crozier, D. D. Falconer, S. A. Mahmoud, "Least sum of squared
errors (LSSE) channel estimation", IEE Proc. F 138(4), 1991, from memory): with N0 of noise the
covariance of a row of G is N0 (X^H X)^-1. How many lags there are is told, or chosen by Akaike's
information criterion, corrected for short frames (C. M. Hurvich and C.-L. Tsai, "Regression and
time series model selection in small samples", Biometrika 76(2), 1989, from memory). It keeps a lag
that explains more than its own estimation costs, which is what decisions ask for; criteria that ask
whether a lag is surely there leave out lags whose sum is felt (measured: 0.06 dB with Schwarz's).
"""

from __future__ import annotations

from copy import copy
from dataclasses import dataclass

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

Complex = NDArray[np.complex128]


@dataclass(frozen=True)
class Window:
    """Lags of an impulse response, in symbol periods.

    Attributes:
        first: 0 or below.
        last: 0 or above.
    """

    first: int
    last: int

    @property
    def size(self) -> int:
        """Number of lags, L."""
        return self.last - self.first + 1

    @property
    def memory(self) -> int:
        """Earlier symbols that a received vector depends on, L - 1."""
        return self.last - self.first

    def inside(self, memory: int | None) -> list[Window]:
        """All windows within this one that hold lag 0, of one memory or (None) of any."""
        return [
            Window(first, last)
            for first in range(self.first, 1)
            for last in range(self.last + 1)
            if memory is None or last - first == memory
        ]


@dataclass(frozen=True, eq=False)
class FirChannel:
    """An estimate.

    Attributes:
        window: its lags.
        taps: complex128 (L, Nr, Nt).
        noise: N0, without bias: the residual's energy over its degrees of freedom.
        freedom: complex degrees of freedom behind it.
        variance: float64 (Nt,); variance of the sum over lags of the taps of one pair of antennas.
    """

    window: Window
    taps: Complex
    noise: float
    freedom: int
    variance: NDArray[np.float64]


def shifted_vectors(vectors: Complex, rows: NDArray[np.int64], window: Window) -> Complex:
    """What each received vector depends on: complex128 (n, L, Nt).

    Args:
        vectors: complex128 (K, Nt); sent in each symbol period; outside of them nothing is.
        rows: int64 (n,); symbol periods received.
        window: lags.
    """
    periods = vectors.shape[0]
    source = rows[:, None] - np.arange(window.first, window.last + 1)[None, :]
    inside = (source >= 0) & (source < periods)
    taken = vectors[np.clip(source, 0, periods - 1)]
    return np.where(inside[..., None], taken, 0.0)


def convolved(vectors: Complex, taps: Complex, window: Window) -> Complex:
    """Received vectors without noise: complex128 (K, Nr) of vectors (K, Nt), taps (L, Nr, Nt)."""
    out = np.zeros((vectors.shape[0], taps.shape[1]), np.complex128)
    for lag, tap in zip(range(window.first, window.last + 1), taps, strict=True):
        made = vectors @ tap.T
        if lag >= 0:
            out[lag:] += made[: max(len(made) - lag, 0)]
        else:
            out[:lag] += made[-lag:]
    return out


def subcarrier_channels(taps: Complex, window: Window, length: int) -> Complex:
    """Channel at each of N subcarriers: complex128 (N, Nr, Nt) of taps (L, Nr, Nt).

    An impulse response of few lags tells all subcarriers' channels with less noise than each
    subcarrier would by itself: J.-J. van de Beek et al., "On channel estimation in OFDM systems",
    IEEE Vehicular Technology Conf. 1995 (from memory).
    """
    lags = np.arange(window.first, window.last + 1)
    turns = np.exp(-2j * np.pi * np.outer(np.arange(length), lags) / length)
    return np.asarray(np.tensordot(turns, taps, axes=1), np.complex128)


def supported_rows(known: NDArray[np.bool_], window: Window) -> NDArray[np.int64]:
    """Symbol periods whose received vector depends on known symbols alone; known (K,)."""
    source = np.arange(known.size)[:, None] - np.arange(window.first, window.last + 1)[None, :]
    inside = (source >= 0) & (source < known.size)
    return np.flatnonzero(np.all(inside & known[np.clip(source, 0, known.size - 1)], axis=1))


class FirFit:
    """Least squares of received vectors on shifted transmit vectors, for any window inside one."""

    def __init__(self, shifted: Complex, received: Complex, window: Window) -> None:
        """From the normal equations.

        Args:
            shifted: complex128 (n, L, Nt), see `shifted_vectors`; an antenna that never sends is
                estimated as zero.
            received: complex128 (n, Nr).
            window: the widest window.
        """
        rows, _, antennas = shifted.shape
        sends = np.any(shifted != 0, axis=(0, 1))
        flat = shifted[:, :, sends].reshape(rows, -1)
        gram = flat.conj().T @ flat
        # Keeps the factors finite where symbols repeat; changes a solvable fit by nothing.
        gram[np.diag_indices_from(gram)] += 1e-12 * max(np.max(gram.real, initial=0.0), 1e-300)
        self._window, self._rows, self._channels = window, rows, received.shape[1]
        self._sends, self._antennas, self._count = sends, antennas, int(sends.sum())
        self._gram, self._cross = gram, flat.conj().T @ received
        self._energy = float(np.sum(np.abs(received) ** 2))

    def without(self, shifted: Complex, received: Complex) -> FirFit:
        """The fit of all rows but some that it was given."""
        flat = shifted[:, :, self._sends].reshape(len(shifted), self._window.size * self._count)
        rest = copy(self)
        rest._rows = self._rows - len(shifted)
        rest._gram = self._gram - flat.conj().T @ flat
        rest._cross = self._cross - flat.conj().T @ received
        rest._energy = self._energy - float(np.sum(np.abs(received) ** 2))
        return rest

    def solve(self, window: Window) -> FirChannel:
        """The estimate with the lags of a window."""
        chosen = self._columns(window.first, window.size)
        factor = scipy.linalg.cho_factor(self._gram[np.ix_(chosen, chosen)])
        cross = self._cross[chosen]
        solved = scipy.linalg.cho_solve(factor, cross)
        inverse = scipy.linalg.cho_solve(factor, np.eye(chosen.size))
        residual = self._energy - float(np.sum(cross.conj() * solved).real)
        freedom = self._channels * (self._rows - chosen.size)
        noise = max(residual, 1e-13 * self._energy, 1e-300) / max(freedom - 1, 1)
        taps = np.zeros((window.size, self._channels, self._antennas), np.complex128)
        shape = (window.size, self._count)
        taps[:, :, self._sends] = solved.reshape(*shape, self._channels).swapaxes(1, 2)
        variance = np.zeros(self._antennas)
        variance[self._sends] = noise * np.diag(inverse).real.reshape(shape).sum(axis=0)
        return FirChannel(window, taps, noise, freedom, variance)

    def best(self, windows: list[Window]) -> Window:
        """The window with the smallest corrected information criterion; the first of equals."""
        criteria = {first: self._criteria(first) for first in {w.first for w in windows}}
        return min(windows, key=lambda w: criteria[w.first][w.size - 1])

    def _columns(self, first: int, lags: int) -> NDArray[np.int64]:
        begin = (first - self._window.first) * self._count
        return np.arange(begin, begin + lags * self._count)

    def _criteria(self, first: int) -> NDArray[np.float64]:
        """The criterion, up to a factor, of windows that begin at lag `first`, of 1, 2, ... lags.

        The windows are nested: one triangular factor gives the energy that each lag explains.
        """
        lags = self._window.last - first + 1
        chosen = self._columns(first, lags)
        factor = scipy.linalg.cholesky(self._gram[np.ix_(chosen, chosen)], lower=True)
        white = scipy.linalg.solve_triangular(factor, self._cross[chosen], lower=True)
        explained = np.sum(np.abs(white) ** 2, axis=1).reshape(lags, self._count).sum(axis=1)
        residual = np.maximum(self._energy - np.cumsum(explained), 1e-13 * self._energy)
        spread = np.maximum(residual, 1e-300) / (self._rows * self._channels)
        parameters = np.arange(1, lags + 1) * self._count
        # Two a complex parameter; where there are hardly more rows than parameters, ever more.
        left = self._rows - parameters - 1
        penalty = np.where(left > 0, 2 * parameters * self._rows / np.maximum(left, 1), np.inf)
        criteria = self._rows * np.log(spread) + penalty
        return np.asarray(self._channels * criteria, np.float64)
