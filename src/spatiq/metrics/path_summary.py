"""Receive channels and antennas over a whole recording: levels, delays, and which are dead."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
import scipy.stats
from numpy.typing import NDArray

from spatiq.metrics.path_figures import NO_SIGNAL, NOTHING, SIGNAL, PathFigures

Floats = NDArray[np.float64]

NO_DELAY: dict[str, float | None] = dict.fromkeys(
    ("delay_symbols", "delay_std_symbols", "delay_ns", "delay_std_ns")
)
_CHANCE = 1e-6  # that a channel with noise alone passes for one that carries the signal
_MOST_SETS = 64


@dataclass
class PooledDelays:
    """Delays over frames, weighted by their variances.

    A frame's delays refer to the mean over those that it tells. So frames are kept apart by which
    they tell, and those that most frames tell are taken.
    """

    _sets: dict[bytes, list[Any]] = field(default_factory=dict)

    def add(self, delay: Floats, std: Floats) -> None:
        """Take in a batch: (F, n) each."""
        told = np.isfinite(delay) & (std > 0)
        for row in np.unique(told, axis=0):
            key = row.tobytes()
            if not row.any() or (key not in self._sets and len(self._sets) >= _MOST_SETS):
                continue
            frames = np.flatnonzero((told == row).all(axis=1))
            weight = np.where(row, 1.0 / np.where(told[frames], std[frames], 1.0) ** 2, 0.0)
            value = np.where(row, delay[frames], 0.0)
            sums = [weight.sum(0), (weight * value).sum(0), (weight * value**2).sum(0)]
            count, *old = self._sets.get(key, [0, 0.0, 0.0, 0.0])
            added = [a + b for a, b in zip(old, sums, strict=True)]
            self._sets[key] = [count + frames.size, *added]

    def pooled(self) -> list[tuple[float | None, float | None]]:
        """Delay and standard deviation of each; None where it was never told.

        Where frames scatter more than they say, the scatter counts.
        """
        if not self._sets:
            return []
        key = max(self._sets, key=lambda k: (self._sets[k][0], k))
        row = np.frombuffer(key, bool)
        count, weight, first, second = self._sets[key]
        found: list[tuple[float | None, float | None]] = []
        for i in range(row.size):
            if not row[i]:
                found.append((None, None))
                continue
            mean = first[i] / weight[i]
            excess = (second[i] - weight[i] * mean**2) / max(count - 1, 1)
            found.append((float(mean), float(np.sqrt(max(excess, 1.0) / weight[i]))))
        return found


@dataclass
class PathSummary:
    """What receive channels and antennas showed."""

    frames: int = 0
    sample_rate: float | None = None
    _antennas_used: int = 0
    _told: int = 0
    _level: Floats | None = None
    _receive: PooledDelays = field(default_factory=PooledDelays)
    _antennas: PooledDelays = field(default_factory=PooledDelays)

    def add(self, paths: PathFigures, antennas: int) -> None:
        """Take in a batch; `antennas`: how many the link uses."""
        if self._level is None:
            self._level = np.zeros((5, paths.receive_power.shape[1]))
        self._level[0] += paths.receive_power.sum(axis=0)
        self._level[1] += (paths.receive_power**2).sum(axis=0)
        self._level[2] += paths.receive_noise.sum(axis=0)
        self._level[3] += (paths.receive_noise**2).sum(axis=0)
        self._told += int(np.isfinite(paths.receive_excess).any(axis=1).sum())
        self._level[4] += antennas * np.nansum(paths.receive_excess, axis=0)
        self._antennas_used, self.sample_rate = antennas, paths.sample_rate
        self._receive.add(paths.receive_delay, paths.receive_delay_std)
        self._antennas.add(paths.antenna_delay, paths.antenna_delay_std)
        self.frames += len(paths.receive_power)

    def receive_channels(self) -> list[dict[str, Any]]:
        """One entry for each receive channel; None where a figure could not be measured."""
        if self._level is None or not self.frames:
            return []
        power, power_square, noise, noise_square, excess = self._level
        delays = self._receive.pooled() or [(None, None)] * power.size
        largest = float((power + noise).max())
        rows = []
        for r in range(power.size):
            state = self._state(float(power[r] + noise[r]), float(excess[r]), largest)
            alive = state == SIGNAL
            delay, std = delays[r] if alive else (None, None)
            snr = 10 * np.log10(power[r] / noise[r]) if alive and power[r] and noise[r] else None
            rows.append(
                {
                    "channel": r,
                    "state": state,
                    "signal_power": float(power[r] / self.frames) if alive else None,
                    "signal_power_std": self._error(power[r], power_square[r]) if alive else None,
                    "noise_power": float(noise[r] / self.frames),
                    "noise_power_std": self._error(noise[r], noise_square[r]),
                    "snr_db": None if snr is None else float(snr),
                    "delay_samples": delay,
                    "delay_std_samples": std,
                    "delay_ns": _scaled(delay, self.sample_rate),
                    "delay_std_ns": _scaled(std, self.sample_rate),
                }
            )
        return rows

    def antenna_delays(self, symbol_rate: float) -> list[dict[str, float | None]]:
        """Delay of each antenna, to be entered with its other figures; empty without any."""
        return [
            {
                "delay_symbols": delay,
                "delay_std_symbols": std,
                "delay_ns": _scaled(delay, symbol_rate),
                "delay_std_ns": _scaled(std, symbol_rate),
            }
            for delay, std in self._antennas.pooled()
        ]

    def _state(self, level: float, excess: float, largest: float) -> str | None:
        """Noise alone: twice the excess is chi-square, two degrees for each coefficient.

        None where the receiver estimated no flat channel.
        """
        if level <= 1e-9 * largest:
            return NOTHING
        if not self._told:
            return None
        freedom = 2 * self._antennas_used * self._told
        chance = scipy.stats.chi2.sf(2.0 * excess, freedom)
        return SIGNAL if chance < _CHANCE else NO_SIGNAL

    def _error(self, total: float, square: float) -> float | None:
        """Standard error of a mean over frames."""
        if self.frames < 2:
            return None
        variance = (square - total**2 / self.frames) / (self.frames - 1)
        return float(np.sqrt(max(variance, 0.0) / self.frames))


def _scaled(value: float | None, rate: float | None) -> float | None:
    """A time in periods of a rate, in nanoseconds."""
    return None if value is None or rate is None else 1e9 * value / rate
