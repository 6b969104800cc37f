"""Do a frame's residuals say that receive channels or antennas differ in delay?

Each frame's scores (see `delay_scores`) give one delay for each channel or antenna, less their
common part, which is the frame's timing. Under no difference the weighted sum of their squares is
chi-square distributed; where residuals were fitted, a little less than that.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import NamedTuple

import numpy as np
import scipy.stats
from numpy.typing import NDArray

from spatiq.receiver.pulse_correlation import PulseCorrelation

Floats = NDArray[np.float64]

CHANCE = 1e-6  # that a frame without a difference shows one, per frame and kind
# Below an EVM of -50 dB residuals are rounding and pulse truncation, which no chance law describes.
_FLOOR = 1e-5
_TOLD = 0.1  # symbol periods: a delay known no better is not told


@dataclass(frozen=True, eq=False)
class DelayEvidence:
    """Delays of F frames' n receive channels or antennas, symbol periods.

    Attributes:
        delay, variance: float64 (F, n); relative to the mean over those told; NaN where the symbols
            do not tell.
        loss: float64 (F,); energy of the interference that the delays cause, relative to N0.
        significant: bool (F,); a difference at chance `CHANCE`.
    """

    delay: Floats
    variance: Floats
    loss: Floats
    significant: NDArray[np.bool_]


def delay_evidence(
    score: Floats, energy: Floats, noise: Floats, scale: EvidenceScale, axis: int
) -> DelayEvidence:
    """Evidence over receive channels (axis 1) or transmit antennas (axis 2).

    Args:
        score, energy: float64 (F, Nr, Nt); of `delay_scores`.
        noise: float64 (F, Nr); N0 of each receive channel.
        scale: see `EvidenceScale`.
        axis: which of the two is told apart.
    """
    other = 3 - axis
    power = energy.sum(axis=2, keepdims=True) / scale.full
    level = np.maximum(noise[:, :, None], _FLOOR * power)
    alive = level > 0
    weight = 2.0 * np.divide(energy, level, out=np.zeros_like(energy), where=alive)
    push = 2.0 * np.divide(score, level, out=np.zeros_like(score), where=alive)
    information, total = weight.sum(axis=other), push.sum(axis=other)
    delay, variance = estimates(total, information)
    common = np.sum(total, axis=1) / np.maximum(np.sum(information, axis=1), 1e-300)
    told = np.isfinite(delay)
    apart = np.where(told, delay - common[:, None], 0.0)
    statistic = np.sum(information * apart**2, axis=1)
    freedom = np.maximum(told.sum(axis=1) - 1, 0)
    limit = _limits(delay.shape[1])[freedom]
    return DelayEvidence(*relative(delay, variance), scale.share * statistic, statistic > limit)


class EvidenceScale(NamedTuple):
    """What sums over a frame of so many periods amount to.

    Attributes:
        share: interference over N0 that unit statistic stands for.
        full: energy of a receive channel with unit received power.
    """

    share: float
    full: float


@lru_cache(maxsize=8)
def evidence_scale(correlation: PulseCorrelation, periods: int, channels: int) -> EvidenceScale:
    """Scale of a frame's evidence.

    A delay d leaves d^2 times the sum of g'(m)^2 over all neighbours m; the statistic has seen the
    two nearest, twice over N0.
    """
    lags = np.arange(1.0, max(correlation.reach, 2.0))
    slopes = correlation.at(correlation.slope, lags)
    full = 2.0 * float(slopes[0] ** 2) * periods
    return EvidenceScale(float(np.sum(slopes**2)) / (full * channels), full)


@lru_cache(maxsize=8)
def _limits(most: int) -> Floats:
    """Quantile of chi-square for 0 to `most` degrees of freedom; none for 0."""
    quantiles = scipy.stats.chi2.isf(CHANCE, np.arange(1, most + 1))
    return np.concatenate([[np.inf], quantiles])


def estimates(total: Floats, information: Floats) -> tuple[Floats, Floats]:
    """Delay and variance from score and information, NaN where they are not told."""
    told = information > 1.0 / _TOLD**2
    safe = np.where(told, information, 1.0)
    return np.where(told, total / safe, np.nan), np.where(told, 1.0 / safe, np.nan)


def channel_delays(score: Floats, information: Floats) -> tuple[Floats, Floats, bool]:
    """Delays (n,) from scores that know N0, their variances, and whether they differ.

    Relative to the mean over those told, as in `DelayEvidence`.
    """
    delay, variance = estimates(score, information)
    told = np.isfinite(delay)
    common = np.sum(score) / max(float(np.sum(information)), 1e-300)
    statistic = float(np.sum(np.where(told, information * (delay - common) ** 2, 0.0)))
    significant = statistic > _limits(delay.size)[max(int(told.sum()) - 1, 0)]
    return *relative(delay, variance), bool(significant)


def relative(delay: Floats, variance: Floats) -> tuple[Floats, Floats]:
    """Delays and variances relative to the mean over those told (last axis)."""
    told = np.isfinite(delay)
    count = np.maximum(told.sum(axis=-1, keepdims=True), 1)
    mean = np.where(told, delay, 0.0).sum(axis=-1, keepdims=True) / count
    spread = np.where(told, variance, 0.0).sum(axis=-1, keepdims=True) / count**2
    return delay - mean, variance * (1.0 - 2.0 / count) + spread
