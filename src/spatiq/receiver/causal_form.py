"""Likelihood of a sequence in a dispersive channel, in a causal form with white noise.

The words c of N symbol periods cost ||y - H x(c)||^2, H a band matrix. With R = H^H H + load I and
its factor R = A^H A, A lower triangular with as narrow a band,

    ||y - H x||^2 = ||A x - z||^2 - load ||x||^2 + constant,    A^H z = H^H y:

row k of A x depends on x[k] and the symbols before it, however the channel's energy lies in time,
and as much energy as can be stands in x[k] itself. This is the whitened matched filter of a vector
channel (G. D. Forney 1972, see `fir_channel`; in blocks: N. Al-Dhahir and A. H. Sayed, "The
finite-length multi-input multi-output MMSE-DFE", IEEE Trans. Signal Process. 48(10), 2000, from
memory). It is exact for any load above 0; near N0 it is also well conditioned.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from spatiq.receiver.fir_channel import Complex, Window


@dataclass(frozen=True, eq=False)
class NormalEquations:
    """H^H H and H^H y of N symbol periods and Nt antennas.

    Attributes:
        blocks: complex128 (N, min(L, N), Nt, Nt); block (i, i + d) of H^H H at [i, d].
        cross: complex128 (N, Nt); H^H y.
    """

    blocks: Complex
    cross: Complex


def normal_equations(
    received: Complex,
    taps: Complex,
    window: Window,
    amplitude: NDArray[np.float64],
    heard: NDArray[np.bool_],
) -> NormalEquations:
    """Normal equations of a run of symbol periods; known symbols' share is taken out beforehand.

    Args:
        received: complex128 (N, Nr); vectors received in the same N periods.
        taps, window: channel (L, Nr, Nt).
        amplitude: (N,); factor of each period's transmit vector; 0: nothing unknown is sent.
        heard: bool (N,); which received vectors count.
    """
    periods, lags, antennas = amplitude.size, window.size, taps.shape[2]
    source = np.arange(periods)[:, None] + np.arange(window.first, window.last + 1)[None, :]
    inside = (source >= 0) & (source < periods)
    valid = inside & heard[np.clip(source, 0, periods - 1)]
    weight = valid.astype(np.float64)
    reach = min(lags, periods)  # no two of the run's periods lie further apart
    blocks = np.zeros((periods, reach, antennas, antennas), np.complex128)
    for d in range(reach):
        # y[k] holds G[k - i] x[i] and G[k - i - d] x[i + d].
        products = taps[d:].conj().transpose(0, 2, 1) @ taps[: lags - d]
        made = weight[:, d:] @ products.reshape(lags - d, -1)
        blocks[:, d] = made.reshape(periods, antennas, antennas)
        partner = np.zeros(periods)
        partner[: periods - d] = amplitude[d:] if d else amplitude
        blocks[:, d] *= (amplitude * partner)[:, None, None]
    taken = np.where(valid[..., None], received[np.clip(source, 0, periods - 1)], 0.0)
    cross = np.einsum("klr,lra->ka", taken, taps.conj(), optimize=True)
    return NormalEquations(blocks, cross * amplitude[:, None])


def band_matrix(equations: NormalEquations, load: Complex) -> Complex:
    """H^H H + load in time-reversed order as lower band, for SciPy's band routines.

    load: complex128 (Nt, Nt), Hermitian; added to every diagonal block.
    """
    periods, lags, antennas, _ = equations.blocks.shape
    band = np.zeros((lags * antennas, periods, antennas), np.complex128)
    for d in range(lags):
        block = equations.blocks[:, d] + (load if d == 0 else 0.0)
        for a in range(antennas):
            for b in range(antennas):
                offset = d * antennas + a - b
                if offset >= 0:
                    # Column: period i + d, which lies before i when time runs backwards.
                    column = block[: periods - d, a, b][::-1]
                    band[offset, : periods - d, b] = column
    return band.reshape(lags * antennas, periods * antennas)


def causal_form(equations: NormalEquations, load: float) -> tuple[Complex, Complex]:
    """z (N, Nt), and the blocks of A: (N, min(L, N), Nt, Nt), [k, l] what x[k - l] does to z[k]."""
    periods, lags, antennas, _ = equations.blocks.shape
    band = band_matrix(equations, load * np.eye(antennas, dtype=np.complex128))
    factor = scipy.linalg.cholesky_banded(band, lower=True, check_finite=False)
    backwards = equations.cross[::-1].reshape(-1)
    below = factor.shape[0] - 1
    white = scipy.linalg.solve_banded((below, 0), factor, backwards, check_finite=False)
    z = np.ascontiguousarray(white.reshape(periods, antennas)[::-1])
    form = np.zeros((periods, lags, antennas, antennas), np.complex128)
    shaped = factor.reshape(-1, periods, antennas)[:, ::-1]
    for lag in range(lags):
        for a in range(antennas):
            for b in range(antennas):
                offset = lag * antennas + b - a
                if offset >= 0:
                    form[lag:, lag, a, b] = shaped[offset, lag:, a].conj()
    return z, form
