"""Carrier leakage and IQ imbalance of each antenna path.

Received vectors of an antenna are regressed on its symbols, their conjugates and a constant while
it sends, jointly over the antennas. Ratios to the direct path do not depend on the channel, so
that they add up over frames. With y = K1 s + K2 conj(s), K1 + conj(K2) = 1 and K1 - conj(K2) =
g exp(-j phi): gain g of Q over I, departure phi from quadrature. Source: M. Valkama, M. Renfors,
V. Koivunen, IEEE Trans. Signal Process. 49(10), 2001 (from memory).
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from spatiq.acceptance.figure_kinds import Figure
from spatiq.acceptance.observation import ObservedFrames
from spatiq.acceptance.pooling import Pooling
from spatiq.link.description import Link

Sums = dict[str, NDArray[Any]]
Floats = NDArray[np.float64]
Complex = NDArray[np.complex128]
# Variance inflation beyond which two of the three cannot be told apart; below 1: they are one.
_INFLATION = (0.9, 50.0)
_NOTE = "the receiver's share included"


def modulator_sums(frames: ObservedFrames) -> Sums:
    """Image and constant of each antenna (F, Nt) times, and with, the direct path's energy."""
    sent, received = frames.sent, frames.fit.received
    on = (sent != 0).astype(np.complex128)
    design = np.concatenate([sent, sent.conj(), on], axis=2)
    adjoint = design.conj().transpose(0, 2, 1)
    gram = adjoint @ design
    inverse = np.linalg.pinv(gram, rcond=1e-9, hermitian=True)
    found = inverse @ (adjoint @ np.where(frames.fit.active[..., None], received, 0.0))
    inflation = np.real(np.einsum("fii,fii->fi", inverse, gram))
    told = (inflation > _INFLATION[0]) & (inflation < _INFLATION[1])
    direct, image, constant = np.split(found, 3, axis=1)
    own, mirrored, still = np.split(told, 3, axis=1)
    energy = np.sum(np.abs(direct) ** 2, axis=2)
    product = np.sum(direct.conj() * image, axis=2)
    leak = np.sum(direct.conj() * constant, axis=2)
    periods = np.maximum(on.real.sum(axis=1), 1)
    return {
        "direct": energy,
        "image": np.where(own & mirrored, product, np.nan),
        "constant": np.where(own & still, leak, np.nan),
        "level": np.sum(np.abs(sent) ** 2, axis=1) / periods,
    }


def imbalance(image: Complex, direct: Floats) -> Complex:
    """g exp(-j phi) from the ratio K2/K1, as numerator and denominator."""
    ratio = image / direct
    first = (1 - ratio.conj()) / (1 - np.abs(ratio) ** 2)
    return np.asarray(2 * first - 1)


def _gain_db(image: Complex, direct: Floats) -> Floats:
    return np.asarray(20 * np.log10(np.abs(imbalance(image, direct))))


def _phase_deg(image: Complex, direct: Floats) -> Floats:
    return np.asarray(-np.degrees(np.angle(imbalance(image, direct))))


def modulator_figures(
    sums: Sums, pooling: Pooling, link: Link, used: list[int]
) -> list[Figure | None]:
    """Figures of the antennas in use; missing where the symbols do not tell them apart."""
    figures = []
    for a in used:
        direct = np.asarray(sums["direct"][:, a], float)
        image = np.asarray(sums["image"][:, a], np.complex128)
        constant = np.asarray(sums["constant"][:, a], np.complex128)
        level = float(np.mean(sums["level"][:, a]))
        leak, error, frames = pooling.complex_ratio(constant, direct)
        scale = 1.0 / (np.sqrt(level) * _gain_at_carrier(link))
        figures.append(
            pooling.of_level(
                "carrier_leakage_db", str(a), leak * scale, error * scale, frames, note=_NOTE
            )
        )
        mirror, error, frames = pooling.complex_ratio(image, direct)
        figures.append(
            pooling.of_level("image_rejection_db", str(a), mirror, error, frames, -1, _NOTE)
        )
        pair = [image, direct]
        figures.append(pooling.of_sums("iq_gain_db", str(a), _gain_db, pair, _NOTE))
        figures.append(pooling.of_sums("iq_phase_deg", str(a), _phase_deg, pair, _NOTE))
    return figures


def _gain_at_carrier(link: Link) -> float:
    """|P(0)| of the pulse: what the matched filter does to a constant; root raised cosine: 1."""
    rate = 16
    half = int(np.ceil(link.pulse.half_span)) * rate
    shape = link.pulse.samples(np.arange(-half, half + 1) / rate, float(rate))
    return abs(float(shape.sum())) / rate
