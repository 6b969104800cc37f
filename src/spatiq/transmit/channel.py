"""Flat channels, one matrix per frame: Rayleigh, Rician, Kronecker-correlated, or given.

To add a model: a frozen dataclass with `draw`, and a test of its moments in tests/transmit. Unless
a model is told otherwise its coefficients have unit mean power, E|h|^2 = 1.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Protocol, runtime_checkable

import numpy as np
from numpy.typing import ArrayLike, NDArray

from spatiq.errors import InputError

Matrix = NDArray[np.complex128]
LineOfSight = ArrayLike | Callable[[int, int], Matrix] | None


@runtime_checkable
class ChannelModel(Protocol):
    """Draws the channel matrices of frames."""

    def draw(self, rng: np.random.Generator, frames: int, receive: int, transmit: int) -> Matrix:
        """Channels of `frames` frames, complex128, shape (F, Nr, Nt)."""
        ...


def exponential_correlation(coefficient: complex, size: int) -> Matrix:
    """R[i, j] = r^(j - i) for j >= i, Hermitian; shape (size, size).

    Method: S. Loyka, "Channel capacity of MIMO architecture using the exponential correlation
    matrix", IEEE Commun. Lett. 5(9), 2001.

    Raises:
        InputError: |r| not below 1.
    """
    if not abs(coefficient) < 1:
        raise InputError("channel", "correlation", coefficient, "a magnitude below 1")
    lags = np.arange(size)[None, :] - np.arange(size)[:, None]
    upper = np.complex128(coefficient) ** np.abs(lags)
    return np.asarray(np.where(lags >= 0, upper, upper.conj()), np.complex128)


def correlation_matrix(given: complex | ArrayLike | None, size: int, end: str) -> Matrix | None:
    """A coefficient (exponential model), a matrix, or None -> matrix (size, size) or None.

    Raises:
        InputError: a matrix of another size, or not Hermitian, unit-diagonal, semidefinite.
    """
    if given is None:
        return None
    matrix = np.asarray(given, np.complex128)
    if matrix.ndim == 0:
        return exponential_correlation(complex(matrix), size)
    field = f"{end} correlation"
    if matrix.shape != (size, size):
        raise InputError("channel", field, f"shape {matrix.shape}", f"({size}, {size})")
    if not np.allclose(matrix, matrix.conj().T, atol=1e-9):
        raise InputError("channel", field, "a matrix that is not Hermitian", "a Hermitian matrix")
    if not np.allclose(np.diag(matrix), 1.0, atol=1e-9):
        raise InputError("channel", field, "a diagonal that is not 1", "unit diagonal")
    if np.linalg.eigvalsh(matrix)[0] < -1e-9:
        raise InputError("channel", field, "a negative eigenvalue", "a semidefinite matrix")
    return matrix


def hermitian_root(matrix: Matrix) -> Matrix:
    """Hermitian square root of a positive semidefinite matrix."""
    values, vectors = np.linalg.eigh(matrix)
    roots = np.sqrt(np.maximum(values, 0.0))
    return np.asarray((vectors * roots) @ vectors.conj().T, np.complex128)


def steering_line_of_sight(
    receive: int, transmit: int, arrival_deg: float, departure_deg: float
) -> Matrix:
    """Line-of-sight matrix of two half-wavelength linear arrays, unit-magnitude entries, (Nr, Nt).

    Angles are from broadside; 0 at both ends gives equal columns of ones.
    """
    at_receiver = np.exp(1j * np.pi * np.arange(receive) * np.sin(np.radians(arrival_deg)))
    at_transmitter = np.exp(1j * np.pi * np.arange(transmit) * np.sin(np.radians(departure_deg)))
    return np.asarray(np.outer(at_receiver, at_transmitter), np.complex128)


@dataclass(frozen=True, eq=False)
class Mixing:
    """H = direct + scale * at_receiver @ G @ at_transmitter, G independent coefficients.

    Attributes:
        direct: complex128 (Nr, Nt), or None for nothing.
        scale: amplitude of the scattered part.
        at_receiver: complex128 (Nr, Nr), or None for the identity.
        at_transmitter: complex128 (Nt, Nt), or None for the identity.
    """

    direct: Matrix | None
    scale: float
    at_receiver: Matrix | None
    at_transmitter: Matrix | None

    def mixed(self, scattered: Matrix) -> Matrix:
        """H from G, both complex128 (..., Nr, Nt)."""
        if self.at_receiver is not None:
            scattered = self.at_receiver @ scattered
        if self.at_transmitter is not None:
            scattered = scattered @ self.at_transmitter
        if self.scale != 1.0:
            scattered = self.scale * scattered
        return scattered if self.direct is None else self.direct + scattered


@dataclass(frozen=True, eq=False)
class Fading:
    """Rayleigh or Rician fading, Kronecker-correlated when told so; E|h|^2 = 1.

    H = sqrt(K/(K+1)) L + sqrt(1/(K+1)) Rr^(1/2) G (Rt^(1/2))^T with G independent CN(0, 1), so that
    E[h_ra conj(h_sb)] of the scattered part is Rr[r, s] Rt[a, b].

    Attributes:
        k_factor: Rician K as a ratio, not in dB; 0 is Rayleigh.
        line_of_sight: L, shape (Nr, Nt), or a function of Nr and Nt that gives it, scaled to unit
            mean power; None: all ones (equal columns).
        receive_correlation: coefficient of the exponential model, or matrix (Nr, Nr), or None.
        transmit_correlation: the same for (Nt, Nt).
        constant: True draws one matrix for the whole recording, False one for each frame.
    """

    k_factor: float = 0.0
    line_of_sight: LineOfSight = None
    receive_correlation: complex | ArrayLike | None = None
    transmit_correlation: complex | ArrayLike | None = None
    constant: bool = False

    def draw(self, rng: np.random.Generator, frames: int, receive: int, transmit: int) -> Matrix:
        """Channels, complex128 (F, Nr, Nt); one repeated matrix when constant."""
        mixing = self.mixing(receive, transmit)
        drawn = 1 if self.constant else frames
        parts = rng.standard_normal((drawn, receive, transmit, 2)) * np.sqrt(0.5)
        channels = mixing.mixed(parts[..., 0] + 1j * parts[..., 1])
        return np.asarray(np.broadcast_to(channels, (frames, receive, transmit)))

    def mixing(self, receive: int, transmit: int) -> Mixing:
        """How independent scattered coefficients become the channel.

        Raises:
            InputError: K negative, or a correlation or line of sight that does not fit.
        """
        if not 0.0 <= self.k_factor < np.inf:
            raise InputError("channel", "Rician K", self.k_factor, "a finite ratio, 0 or more")
        at_receiver = correlation_matrix(self.receive_correlation, receive, "receive")
        at_transmitter = correlation_matrix(self.transmit_correlation, transmit, "transmit")
        direct = None
        share = self.k_factor / (self.k_factor + 1)
        if self.k_factor > 0:
            direct = np.sqrt(share) * self._direct(receive, transmit)
        return Mixing(
            direct=direct,
            scale=float(np.sqrt(1 - share)),
            at_receiver=None if at_receiver is None else hermitian_root(at_receiver),
            at_transmitter=None if at_transmitter is None else hermitian_root(at_transmitter).T,
        )

    def _direct(self, receive: int, transmit: int) -> Matrix:
        if self.line_of_sight is None:
            return np.ones((receive, transmit), np.complex128)
        given = self.line_of_sight
        direct = np.asarray(given(receive, transmit) if callable(given) else given, np.complex128)
        if direct.shape != (receive, transmit):
            raise InputError(
                "channel", "line of sight", f"shape {direct.shape}", f"({receive}, {transmit})"
            )
        power = float(np.mean(np.abs(direct) ** 2))
        if not (np.isfinite(power) and power > 0):
            raise InputError("channel", "line of sight", f"mean power {power}", "a positive power")
        return np.asarray(direct / np.sqrt(power), np.complex128)


def rayleigh(
    *,
    receive_correlation: complex | ArrayLike | None = None,
    transmit_correlation: complex | ArrayLike | None = None,
    constant: bool = False,
) -> Fading:
    """Rayleigh fading; see `Fading`."""
    return Fading(0.0, None, receive_correlation, transmit_correlation, constant)


def rician(
    k_db: float,
    *,
    line_of_sight: LineOfSight = None,
    receive_correlation: complex | ArrayLike | None = None,
    transmit_correlation: complex | ArrayLike | None = None,
    constant: bool = False,
) -> Fading:
    """Rician fading of K given in dB; see `Fading`."""
    k_factor = float(10 ** (k_db / 10))
    return Fading(k_factor, line_of_sight, receive_correlation, transmit_correlation, constant)


@dataclass(frozen=True, eq=False)
class Given:
    """Channels as given, never rescaled.

    Attributes:
        channels: complex, shape (Nr, Nt) for every frame alike, or (F, Nr, Nt).
    """

    channels: ArrayLike

    def draw(self, rng: np.random.Generator, frames: int, receive: int, transmit: int) -> Matrix:
        """Channels, complex128 (F, Nr, Nt). Raises InputError when the shape does not fit."""
        given = np.asarray(self.channels, np.complex128)
        if given.shape not in ((receive, transmit), (frames, receive, transmit)):
            raise InputError(
                "channel",
                "matrices",
                f"shape {given.shape}",
                f"({receive}, {transmit}) or ({frames}, {receive}, {transmit}): "
                "frames, receive antennas, transmit antennas",
            )
        if not np.isfinite(given).all():
            raise InputError("channel", "matrices", "a value that is not finite", "finite numbers")
        return np.asarray(np.broadcast_to(given, (frames, receive, transmit)))
