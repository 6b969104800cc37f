"""Carrier, symbol clock and frame period: how far they are from what the description says."""

from __future__ import annotations

from typing import Any

import numpy as np
import scipy.stats
from numpy.typing import NDArray

from spatiq.acceptance.figure_kinds import Figure
from spatiq.acceptance.fit import position
from spatiq.acceptance.observation import ObservedFrames
from spatiq.acceptance.pooling import Pooling
from spatiq.link.description import Link

Sums = dict[str, NDArray[Any]]
Floats = NDArray[np.float64]
_NOTE = "the receiver's own reference included"


def synchronisation_sums(frames: ObservedFrames) -> Sums:
    """One value a frame (F,), and the two sums behind the carrier's settling."""
    fit = frames.fit
    place = position(fit.active)[None, :, None]
    bend, weight = fit.amount(1j * place**2 * fit.reference)
    return {
        "carrier_hz": frames.carrier_hz,
        "clock_ppm": frames.columns["clock_ppm"] + 1e6 * fit.clock,
        "start_s": frames.start_s,
        "start_std_s": frames.columns["timing_std_samples"] * (frames.symbol_s / frames.step),
        "segment": frames.columns["segment"],
        "bend": bend,
        "bend_weight": weight,
    }


def synchronisation_figures(sums: Sums, pooling: Pooling, link: Link) -> list[Figure | None]:
    """All of them; those in ppm of the carrier only when the description states one."""
    carrier = np.asarray(sums["carrier_hz"], float)
    figures = [pooling.of_mean("carrier_error_hz", "", carrier, _NOTE)]
    if link.carrier_hz:
        ratio = carrier / link.carrier_hz * 1e6
        figures.append(pooling.of_mean("carrier_error_ppm", "", ratio, _NOTE))
    active = np.flatnonzero(link.layout.kind)
    periods = max(int(active[-1] - active[0]), 1)

    def settling(bend: Floats, weight: Floats) -> Floats:
        # Phase q u^2, u = -1..1 over the frame: the carrier falls by 8 q / periods from end to end.
        return np.asarray(-8 * bend / weight / periods / (2 * np.pi) * link.symbol_rate_hz)

    bends = [sums["bend"], sums["bend_weight"]]
    figures.append(pooling.of_sums("carrier_settling_hz", "", settling, bends))
    clock = -np.asarray(sums["clock_ppm"], float)
    figures.append(pooling.of_mean("clock_error_ppm", "", clock, _NOTE))
    if link.period_symbols is not None:
        figures += _period_figures(sums, pooling, link.period_symbols / link.symbol_rate_hz)
    return figures


def frame_grid(start: Floats, period: float) -> tuple[Floats, Floats]:
    """Whole number of periods since the first frame, found from one frame to the next (F,)."""
    steps = np.round(np.diff(start) / period)
    return np.concatenate([[0.0], np.cumsum(steps)]), steps


def _period_figures(sums: Sums, pooling: Pooling, period: float) -> list[Figure | None]:
    start = np.asarray(sums["start_s"], float)
    frames = start.size
    if frames < 3 or np.any(sums["segment"] != sums["segment"][0]):
        return []
    grid, steps = frame_grid(start, period)
    if np.any(steps < 1):
        return []
    fitted = scipy.stats.linregress(grid, start)
    error = float(fitted.stderr) / period * 1e6
    ratio = (float(fitted.slope) / period - 1) * 1e6
    half = float(scipy.stats.t.ppf(0.5 + pooling.confidence / 2, frames - 2)) * error
    ends = (ratio - half, ratio + half)
    figures: list[Figure | None] = [
        pooling.between("frame_period_error_ppm", "", ratio, ends, frames, _NOTE)
    ]
    left = start - fitted.intercept - fitted.slope * grid
    square = float(np.sum(left**2))
    own = float(np.mean(np.asarray(sums["start_std_s"], float) ** 2))
    tail = (1 - pooling.confidence) / 2
    bounds = [float(scipy.stats.chi2.ppf(q, frames - 2)) for q in (1 - tail, tail)]
    low, high = (1e9 * np.sqrt(max(square / b - own, 0.0)) for b in bounds)
    value = 1e9 * np.sqrt(max(square / (frames - 2) - own, 0.0))
    figures.append(
        pooling.between("frame_jitter_ns", "", float(value), (float(low), float(high)), frames)
    )
    return figures
