"""Power of each antenna, along the frame, at its edges, and when it should be silent."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from spatiq.acceptance.figure_kinds import Figure
from spatiq.acceptance.fit import position
from spatiq.acceptance.observation import ObservedFrames
from spatiq.acceptance.pooling import Pooling
from spatiq.acceptance.setup import PATH_LOSS, Setup

Sums = dict[str, NDArray[Any]]
Floats = NDArray[np.float64]


def gain_powers(frames: ObservedFrames) -> tuple[Floats, Floats]:
    """|gain|^2 (F, Nr, Nt), what its estimate's noise adds taken off; N0 (F,)."""
    fit = frames.fit
    periods = np.maximum(fit.active.sum(axis=1), 1) * fit.freedom * fit.received.shape[2]
    noise = np.sum(np.abs(fit.error) ** 2, axis=(1, 2)) / periods
    variance = np.sum(np.abs(fit.projector) ** 2, axis=2) * noise[:, None]
    return np.abs(fit.gain) ** 2 - variance[:, None, :], noise


def power_sums(frames: ObservedFrames) -> Sums:
    """Sums behind the figures below, a row for each frame."""
    fit = frames.fit
    power, noise = gain_powers(frames)
    on = frames.sent != 0
    periods = np.maximum(on.sum(axis=1), 1)
    level = np.sum(np.abs(frames.sent) ** 2, axis=1) / periods
    place = position(fit.active)[None, :, None]
    along = [fit.amount(place * fit.reference)]
    for a in range(frames.sent.shape[2]):
        part = frames.sent[:, :, a, None] * fit.gain[:, None, :, a]
        along.append(fit.amount(place * part))
    edges = _edges(fit.active)
    return {
        "power": power.mean(axis=1) * level / frames.step[:, None],
        "gain_power": power,
        "noise": noise,
        "droop": np.stack([a[0] for a in along], axis=1),
        "droop_weight": np.stack([a[1] for a in along], axis=1),
        "edge": np.einsum("fkr,fkr->f", fit.reference.conj() * edges, fit.received).real,
        "edge_weight": np.sum(np.abs(fit.reference * edges) ** 2, axis=(1, 2)),
    }


def _edges(active: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """First and last active period (F, K, 1)."""
    chosen = np.zeros_like(active)
    for f in range(active.shape[0]):
        chosen[f, np.flatnonzero(active[f])[[0, -1]]] = True
    return np.asarray(chosen[..., None])


def _decibels(power: Floats, count: Floats) -> Floats:
    return np.asarray(10 * np.log10(power / count))


def _imbalance(power: Floats) -> Floats:
    return np.asarray(10 * np.log10(power.max(axis=1) / power.min(axis=1)))


def _droop(slope: Floats, weight: Floats) -> Floats:
    b = slope / weight
    return np.asarray(20 * np.log10((1 + b) / (1 - b)))


def _ramp(amount: Floats, weight: Floats) -> Floats:
    return np.asarray(20 * np.log10(amount / weight))


def power_figures(
    sums: Sums, pooling: Pooling, used: list[int], setup: Setup
) -> list[Figure | None]:
    """Figures of the antennas in use."""
    power = np.asarray(sums["power"], float)[:, used]
    note = PATH_LOSS if setup is Setup.OVER_AIR else ""
    ones = np.ones(len(power))
    figures = [
        pooling.of_sums("power_db", str(a), _decibels, [power[:, i], ones], note)
        for i, a in enumerate(used)
    ]
    if len(used) > 1:
        figures.append(pooling.of_sums("power_imbalance_db", "", _imbalance, [power], note))
    for column, subject in [(0, ""), *((a + 1, str(a)) for a in used)]:
        pair = [sums["droop"][:, column], sums["droop_weight"][:, column]]
        figures.append(pooling.of_sums("power_droop_db", subject, _droop, pair))
    edge = [sums["edge"], sums["edge_weight"]]
    figures.append(pooling.of_sums("edge_ramp_db", "", _ramp, edge))
    if setup is Setup.PORTS and len(used) > 1:
        figures += [_isolation(sums, pooling, a, used) for a in used]
    return figures


def _isolation(sums: Sums, pooling: Pooling, antenna: int, used: list[int]) -> Figure | None:
    """Receive channel a is cabled to antenna port a: what it sees while others send."""
    power = np.asarray(sums["gain_power"], float)[:, antenna]
    others = [b for b in used if b != antenna]
    ratio, error, frames = pooling.complex_ratio(
        power[:, others].mean(axis=1) + 0j, power[:, antenna]
    )
    if not (np.isfinite(ratio) and np.isfinite(error)):
        return None
    share, error = float(ratio.real), error * np.sqrt(2)
    half = pooling.quantile(frames) * error
    high = share + half
    if high <= 0:
        return None
    low = share - half
    values = [-10 * float(np.log10(v)) if v > 0 else np.inf for v in (high, low)]
    middle = share if share > 0 else high
    return pooling.between(
        "isolation_db",
        str(antenna),
        -10 * float(np.log10(middle)),
        (values[0], values[1]),
        frames,
    )
