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
covariance of a row of G is N0 (X^H X)^-1. How many lags there are is told, or chosen by the
Bayesian information criterion (G. Schwarz, "Estimating the dimension of a model", Ann. Statist.
6(2), 1978).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
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
            shifted: complex128 (n, L, Nt), see `shifted_vectors`.
            received: complex128 (n, Nr).
            window: the widest window.
        """
        rows, lags, antennas = shifted.shape
        flat = shifted.reshape(rows, lags * antennas)
        self._window = window
        self._antennas = antennas
        self._rows = rows
        self._gram = flat.conj().T @ flat
        self._cross = flat.conj().T @ received
        self._energy = float(np.sum(np.abs(received) ** 2))
        self._channels = received.shape[1]

    def solve(self, window: Window) -> FirChannel:
        """The estimate with the lags of a window."""
        chosen, taps, inverse = self._solution(window)
        channels = self._channels
        residual = self._energy - float(np.sum(self._cross[chosen].conj() * taps).real)
        freedom = channels * (self._rows - np.linalg.matrix_rank(self._gram[chosen][:, chosen]))
        noise = max(residual, 1e-13 * self._energy, 1e-300) / max(int(freedom) - 1, 1)
        shape = (window.size, self._antennas)
        spread = noise * np.diag(inverse).real.reshape(shape).sum(axis=0)
        shaped = taps.reshape(*shape, channels).swapaxes(1, 2)
        return FirChannel(window, shaped, noise, int(freedom), np.asarray(spread, np.float64))

    def criterion(self, window: Window) -> float:
        """Bayesian information criterion, halved: smallest is best."""
        chosen, taps, _ = self._solution(window)
        residual = self._energy - float(np.sum(self._cross[chosen].conj() * taps).real)
        spread = max(residual, 1e-13 * self._energy, 1e-300) / (self._rows * self._channels)
        parameters = window.size * self._antennas
        return self._channels * (self._rows * np.log(spread) + parameters * np.log(self._rows))

    def best(self, windows: list[Window]) -> Window:
        """The window with the smallest criterion; the first of equals."""
        return min(windows, key=self.criterion)

    def _solution(self, window: Window) -> tuple[NDArray[np.int64], Complex, Complex]:
        first = (window.first - self._window.first) * self._antennas
        chosen = np.arange(first, first + window.size * self._antennas)
        gram = self._gram[np.ix_(chosen, chosen)]
        inverse = np.linalg.pinv(gram, rcond=1e-10, hermitian=True)
        return chosen, inverse @ self._cross[chosen], inverse
