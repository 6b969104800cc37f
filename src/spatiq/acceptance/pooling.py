"""Figures over frames with what they are worth: the scatter from frame to frame tells.

Sums are added over frames and a figure is a function of the totals, so that no ratio is averaged.
Its standard error is the delete-one jackknife's, its interval Student's with F - 1 degrees of
freedom (B. Efron and C. Stein, Ann. Statist. 9(3), 1981; from memory). Frames are taken to be
independent of each other.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import scipy.stats
from numpy.typing import NDArray

from spatiq.acceptance.figure_kinds import BY_NAME, Figure

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Pooling:
    """How figures are made.

    Attributes:
        confidence: level of the intervals, two-sided.
    """

    confidence: float

    def quantile(self, frames: int) -> float:
        """Half-width of an interval in standard errors."""
        if frames < 2:
            return float("inf")
        return float(scipy.stats.t.ppf(0.5 + self.confidence / 2, frames - 1))

    def of_sums(
        self,
        name: str,
        subject: str,
        function: Callable[..., Floats],
        sums: Sequence[NDArray[Any]],
        note: str = "",
    ) -> Figure | None:
        """A figure that is a function of totals.

        Args:
            name: of the kind.
            subject: antenna, pair or channel.
            function: of as many arrays as there are sums, each (n,) or (n, ...), elementwise over
                the leading axis.
            sums: arrays (F, ...); frames with a value that is not finite are left out.
            note: what limits its meaning.

        Returns:
            None when no frame tells, or the function has no value there.
        """
        usable = np.ones(len(sums[0]), np.bool_)
        for part in sums:
            usable &= np.isfinite(part).reshape(len(part), -1).all(axis=1)
        kept = [part[usable] for part in sums]
        frames = int(usable.sum())
        if not frames:
            return None
        with np.errstate(divide="ignore", invalid="ignore"):
            totals = [part.sum(axis=0, keepdims=True) for part in kept]
            value = float(function(*totals)[0])
            if not np.isfinite(value):
                return None
            error = np.inf
            if frames > 1:
                left = function(*[t - part for t, part in zip(totals, kept, strict=True)])
                spread = np.sum((left - left.mean()) ** 2)
                error = float(np.sqrt(spread * (frames - 1) / frames))
        return self.with_error(name, subject, value, error, frames, note)

    def of_mean(self, name: str, subject: str, values: Floats, note: str = "") -> Figure | None:
        """A figure that is the mean of one value a frame, (F,); NaN where a frame does not tell."""
        given = values[np.isfinite(values)]
        if not given.size:
            return None
        error = float(given.std(ddof=1) / np.sqrt(given.size)) if given.size > 1 else np.inf
        return self.with_error(name, subject, float(given.mean()), error, given.size, note)

    def of_median(self, name: str, subject: str, values: Floats, note: str = "") -> Figure | None:
        """A figure that is the median of one value a frame; its interval lies between two of them.

        Source: H. A. David and H. N. Nagaraja, Order Statistics, 3rd ed., 2003, section 7.1
        (from memory).
        """
        given = np.sort(values[np.isfinite(values)])
        if not given.size:
            return None
        rank = int(scipy.stats.binom.ppf((1 - self.confidence) / 2, given.size, 0.5))
        told = rank >= 1
        low = float(given[rank - 1]) if told else -np.inf
        high = float(given[given.size - rank]) if told else np.inf
        middle = float(np.median(given))
        return self._figure(name, subject, middle, low, high, given.size, note)

    def with_error(
        self, name: str, subject: str, value: float, error: float, frames: int, note: str = ""
    ) -> Figure | None:
        """A figure of known standard error."""
        if not np.isfinite(value):
            return None
        half = self.quantile(frames) * error if np.isfinite(error) else np.inf
        return self._figure(name, subject, value, value - half, value + half, frames, note)

    def between(
        self,
        name: str,
        subject: str,
        value: float,
        ends: tuple[float, float],
        frames: int,
        note: str = "",
    ) -> Figure:
        """A figure whose interval is known."""
        return self._figure(name, subject, value, ends[0], ends[1], frames, note)

    def of_level(
        self,
        name: str,
        subject: str,
        level: complex,
        error: float,
        frames: int,
        sign: int = 1,
        note: str = "",
    ) -> Figure | None:
        """A level in dB that may drown in noise: then only its upper end is told.

        Args:
            name, subject: of the figure.
            level: amplitude ratio, complex, no bias.
            error: standard error of each of its components.
            frames: behind it.
            sign: -1 for a figure that is better the smaller the level (a rejection).
            note: what limits its meaning.
        """
        if not (np.isfinite(level) and np.isfinite(error)):
            return None
        half = self.quantile(frames) * error
        size = float(np.sqrt(max(abs(level) ** 2 - 2 * error**2, 0.0)))
        high = abs(level) + half
        low = max(abs(level) - half, 0.0)
        # Two components of noise alone: F distributed with 2 and 2 (F - 1) degrees of freedom.
        if frames > 1 and abs(level) ** 2 < 2 * error**2 * scipy.stats.f.ppf(
            self.confidence, 2, 2 * (frames - 1)
        ):
            low = 0.0
        if not 0 < high < np.inf:
            return None
        middle = size if size > 0 else high
        values = [20 * sign * float(np.log10(v)) if v > 0 else -sign * np.inf for v in (low, high)]
        return self._figure(
            name,
            subject,
            20 * sign * float(np.log10(middle)),
            min(values),
            max(values),
            frames,
            note,
        )

    def complex_ratio(
        self, above: NDArray[np.complex128], below: Floats
    ) -> tuple[complex, float, int]:
        """Ratio of totals of (F,) terms, standard error of each component, frames behind it."""
        usable = np.isfinite(above) & np.isfinite(below)
        top, bottom = above[usable], below[usable]
        frames = int(usable.sum())
        if frames < 2 or not bottom.sum() > 0:
            return complex("nan"), float("nan"), frames
        left = (top.sum() - top) / (bottom.sum() - bottom)
        spread = np.sum(np.abs(left - left.mean()) ** 2) * (frames - 1) / frames
        return complex(top.sum() / bottom.sum()), float(np.sqrt(spread / 2)), frames

    def _figure(
        self,
        name: str,
        subject: str,
        value: float,
        low: float,
        high: float,
        frames: int,
        note: str,
    ) -> Figure:
        kind = BY_NAME[name]
        if kind.unit in ("", "%"):  # ratios of magnitudes and probabilities
            low = max(low, 0.0)
        return Figure(kind, subject, value, low, high, self.confidence, frames, note)
