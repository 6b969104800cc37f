"""A dispersive channel as it was drawn: paths, each with a delay and a channel matrix."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from spatiq.link.description import Link
from spatiq.signal.pulses import Pulse
from spatiq.transmit.channel import Matrix
from spatiq.transmit.frames import received_payload_power
from spatiq.transmit.moving_channel import Field

# Instants of the payload over which the SNR of a moving channel is taken.
SNR_INSTANTS = 16
# Samples a symbol at which a pulse is laid over itself; any pulse of the formats fits.
_FINE = 64


def pulse_overlap(pulse: Pulse, lags: NDArray[np.float64]) -> NDArray[np.float64]:
    """Correlation of a pulse with itself, integral of p(t) p(t - lag) dt; lags in symbol periods.

    What a symbol sent `lag` late leaves behind the matched filter at the symbol's own instant.
    """
    reach = int(np.ceil(pulse.half_span * _FINE))
    t = np.arange(-reach, reach + 1) / _FINE
    still = pulse.samples(t, _FINE)
    flat = np.ravel(lags)
    found = np.array([float(still @ pulse.samples(t - lag, _FINE)) for lag in flat]) / _FINE
    return found.reshape(np.shape(lags))


@dataclass(frozen=True, eq=False)
class Echoes:
    """Paths of a dispersive channel through a recording of F frames.

    What a symbol vector x sent at instant t leaves behind the matched filter at instant t + u is
    sum over p of H[p] x overlap(u - delay[p]), `overlap` the pulse's correlation with itself.

    Attributes:
        delays: float64 (P,); nominal symbol periods.
        matrices: complex128 (F, P, Nr, Nt); None of a channel that moves.
        fields: P channels as functions of time; empty of one that stands still in each frame.
    """

    delays: NDArray[np.float64]
    matrices: Matrix | None
    fields: Sequence[Field] = ()

    def at(self, frame: int, instant: float) -> Matrix:
        """Channel matrices of all paths, complex128 (P, Nr, Nt).

        Args:
            frame: index of the frame, for a channel that stands still in it.
            instant: nominal symbol periods from the first sample, for one that moves.
        """
        if self.matrices is not None:
            return np.asarray(self.matrices[frame])
        return np.array([field.along(instant, 1.0, 1)[0] for field in self.fields])

    def received(self, path: int, frame: int, start: float, step: float, vectors: Matrix) -> Matrix:
        """What one path makes of a frame's vectors (K, Nt): complex128 (K, Nr).

        start, step: instant of the first symbol and from symbol to symbol, nominal symbol periods.
        """
        if self.matrices is not None:
            return np.asarray(vectors @ self.matrices[frame, path].T)
        return self.fields[path].received(start, step, vectors)

    def taps(
        self, pulse: Pulse, frame: int, instant: float, lags: NDArray[np.float64]
    ) -> NDArray[np.complex128]:
        """Channel as sampled behind the matched filter, `lags` symbol periods after the symbol.

        Returns:
            complex128 (L, Nr, Nt).
        """
        overlap = pulse_overlap(pulse, lags[:, None] - self.delays[None, :])
        return np.asarray(np.tensordot(overlap, self.at(frame, instant), axes=1))


def symbol_power(link: Link, delays: NDArray[np.float64], paths: Matrix) -> NDArray[np.float64]:
    """Mean energy that a payload symbol brings to a receive antenna over all paths, float64 (F,).

    Args:
        link: the link description.
        delays: (P,); nominal symbol periods.
        paths: complex128 (F, P, Nr, Nt).

    Paths closer than the pulse is wide add up in amplitude, others in power:
    sum over p, q of overlap(delay p - delay q) trace(H_p R H_q^H) / Nr.
    """
    overlap = pulse_overlap(link.pulse, delays[:, None] - delays[None, :])
    values, vectors = np.linalg.eigh((overlap + overlap.T) / 2)
    roots = vectors * np.sqrt(np.maximum(values, 0.0))
    apart = np.einsum("pv,fprt->vfrt", roots, paths, optimize=True)
    total = np.sum([received_payload_power(link, part) for part in apart], axis=0)
    return np.asarray(total, np.float64)


def standing_figures(link: Link, echoes: Echoes) -> tuple[Matrix, NDArray[np.float64]]:
    """Sum of the paths' matrices (F, Nr, Nt), and mean payload power (F,)."""
    assert echoes.matrices is not None
    return echoes.matrices.sum(axis=1), symbol_power(link, echoes.delays, echoes.matrices)


def moving_figures(
    link: Link, echoes: Echoes, starts: NDArray[np.float64], step: float
) -> tuple[Matrix, NDArray[np.float64]]:
    """Sum of the paths in the middle of each payload (F, Nr, Nt), and mean payload power (F,).

    starts: frame starts in nominal symbol periods; step: received symbol period in nominal ones.
    """
    first, last = link.layout.payload_index[0] * step, link.layout.payload_index[-1] * step
    between = (last - first) / (SNR_INSTANTS - 1)
    middles, powers = [], []
    for start in starts:
        middle = start + (first + last) / 2
        middles.append(np.sum([f.along(middle, step, 1)[0] for f in echoes.fields], axis=0))
        along = [f.along(start + first, between, SNR_INSTANTS) for f in echoes.fields]
        powers.append(symbol_power(link, echoes.delays, np.stack(along, axis=1)).mean())
    return np.array(middles, np.complex128), np.array(powers)
