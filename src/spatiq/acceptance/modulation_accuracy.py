"""Modulation accuracy: error vectors after the fit, over all antennas and for each.

EVM is the root of error energy over reference energy (3GPP TS 36.104, annex E; from memory). The
error energy is raised by the share of it that the fit has taken, so that short frames do not look
better than long ones.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from spatiq.acceptance.figure_kinds import Figure
from spatiq.acceptance.observation import ObservedFrames
from spatiq.acceptance.pooling import Pooling

Sums = dict[str, NDArray[Any]]
Floats = NDArray[np.float64]
_NOTE = "receiver noise included"
_KINDS = ("evm_rms", "evm_after_change", "evm_same_antenna")


def accuracy_sums(frames: ObservedFrames) -> Sums:
    """Energies (F, 1 + Nt) over all antennas and for each, and ends of the distribution."""
    fit = frames.fit
    share = np.abs(frames.sent) ** 2
    total = share.sum(axis=2, keepdims=True)
    share = np.divide(share, total, out=np.zeros_like(share), where=total > 0)
    share = np.concatenate([fit.active[..., None].astype(float), share], axis=2)
    error = np.sum(np.abs(fit.error) ** 2, axis=2) / fit.freedom[:, None]
    reference = np.sum(np.abs(fit.reference) ** 2, axis=2)
    changed, same = _changes(frames)
    sums: Sums = {}
    periods = (fit.active, changed, same)
    for name, chosen in zip(_KINDS, periods, strict=True):
        sums[f"{name}.error"] = np.einsum("fk,fka->fa", error * chosen, share)
        sums[f"{name}.reference"] = np.einsum("fk,fka->fa", reference * chosen, share)
    sums["evm_95"], sums["evm_peak"] = _ends(error, reference, share)
    return sums


def _changes(frames: ObservedFrames) -> tuple[NDArray[np.bool_], NDArray[np.bool_]]:
    """Periods whose antennas are not those of the period before, and those whose are (F, K)."""
    on = frames.sent != 0
    before = np.zeros_like(on)
    before[:, 1:] = on[:, :-1]
    sending = frames.fit.active & before.any(axis=2)
    differs = np.any(on != before, axis=2)
    return sending & differs, sending & ~differs


def _ends(error: Floats, reference: Floats, share: Floats) -> tuple[Floats, Floats]:
    """95th percentile and largest error magnitude over the rms reference, percent (F, 1 + Nt)."""
    shape = (share.shape[0], share.shape[2])
    high, peak = np.full(shape, np.nan), np.full(shape, np.nan)
    for f, a in np.ndindex(shape):
        chosen = share[f, :, a] > 0.5
        if chosen.sum() < 2 or not reference[f, chosen].mean() > 0:
            continue
        sizes = np.sqrt(error[f, chosen] / reference[f, chosen].mean())
        high[f, a] = 100 * np.quantile(sizes, 0.95, method="median_unbiased")
        peak[f, a] = 100 * sizes.max()
    return high, peak


def _percent(error: Floats, reference: Floats) -> Floats:
    return np.asarray(100 * np.sqrt(error / reference))


def accuracy_figures(sums: Sums, pooling: Pooling) -> list[Figure | None]:
    """Figures over all antennas, then for each."""
    aided = sums["aided"]
    note = _NOTE if np.all(aided) else f"{_NOTE}; some payload against decided symbols"
    figures = []
    for column in range(sums["evm_95"].shape[1]):
        subject = "" if column == 0 else str(column - 1)
        for name in _KINDS:
            parts = [sums[f"{name}.{part}"][:, column] for part in ("error", "reference")]
            figures.append(pooling.of_sums(name, subject, _percent, parts, note))
        ends = {name: np.asarray(sums[name][:, column], float) for name in ("evm_95", "evm_peak")}
        figures.append(pooling.of_mean("evm_95", subject, ends["evm_95"], note))
        figures.append(pooling.of_median("evm_peak", subject, ends["evm_peak"], note))
    return figures
