"""Columns locked to a wrong phase: seen by the scatter of their symbols, and turned right.

Antennas that are heard one after the other while the phase walks come with phases of their own
error. Decisions on a dense constellation can then hold a column at a false angle, at which many
symbols fall near points that were not sent. The nearest points' distance, summed over the symbols
decided on an antenna, shows it: it is smallest at the right angle, up to the constellation's own
symmetry (decision-directed phase error, U. Mengali, A. N. D'Andrea, "Synchronization Techniques for
Digital Receivers", ch. 5; from memory).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from spatiq.receiver.frame_fit import FrameFit

_REACH, _STEP = 0.75, 0.05  # radians: to half way to the symmetry of a square constellation


def turn_columns(fit: FrameFit) -> bool:
    """Turn columns of a single-antenna codebook whose symbols scatter less at another angle.

    Returns whether any was turned.
    """
    book = fit.plan.tables.codebook
    if not book.single_antenna or book.block > 1 or book.constellation.size < 8:
        return False
    tables = fit.plan.tables
    block = fit.plan.blocks.block[tables.payload]
    y = fit.straightened()[tables.payload]
    y = y / tables.symbol_amplitude[tables.payload][:, None]
    likely = np.argmax(np.abs(fit.mean[tables.payload]), axis=1)
    points = np.unique(book.vectors[book.vectors != 0])
    turned = False
    for antenna in np.unique(likely):
        at = likely == antenna
        column = fit.channels[block[at], :, antenna]
        energy = np.sum(np.abs(column) ** 2, axis=1)
        symbols = np.sum(column.conj() * y[at], axis=1) / np.maximum(energy, 1e-300)
        angle = _best_angle(symbols, points)
        if angle != 0.0:
            fit.channels[:, :, antenna] *= np.exp(1j * angle)
            turned = True
    return turned


def _best_angle(symbols: NDArray[np.complex128], points: NDArray[np.complex128]) -> float:
    """Angle by which symbols (n,) lie off the points, 0 first among equals."""
    count = round(_REACH / _STEP)
    angles = _STEP * np.array(sorted(range(-count, count + 1), key=abs))
    back = symbols * np.exp(-1j * angles)[:, None]
    distance = np.abs(back[:, :, None] - points) ** 2
    scatter = distance.min(axis=2).sum(axis=1)
    # A step off the present angle is what the smoother does by itself.
    best = int(np.argmin(scatter))
    return float(angles[best]) if abs(angles[best]) > _STEP and scatter[best] < scatter[0] else 0.0
