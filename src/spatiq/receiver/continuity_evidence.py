"""Do a frame's residuals say that something changed within it, and about where?

The scores of gain, carrier phase and timing have mean zero throughout an unbroken frame, and the
residual energy is even. For each of them, and each border between two blocks, the likelihood-ratio
test of one change there against none (D. V. Hinkley, Biometrika 57(1), 1970; L. Horvath, Ann.
Statist. 21(2), 1993, for the variance; from memory). Each single test is held to `CHANCE`, so that
an unbroken frame of B blocks in white noise passes for broken with a probability below 4 B `CHANCE`
(Bonferroni). A frame that has lost whole symbol periods changes in nothing but its end, which comes
early and leaves silence: `ends_early`, another 8 `CHANCE`. Smaller changes than `LEAST` are not
worth a look however certain they are.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.stats
from numpy.typing import NDArray
from scipy.special import logsumexp

CHANCE = 1e-9
# Amplitude ratio, radians, symbol periods, and ratio of noise powers.
LEAST = (0.02, 0.03, 0.012, 1.25)
_LAST = 8
_FLOOR = 1e-4  # of the signal power: noise steps below it may be pulse truncation
NAMES = ("gain", "phase", "timing", "noise")


@dataclass(frozen=True, eq=False)
class Evidence:
    """Per frame and kind of change (`NAMES`): is there one, how sure, and at which border.

    Attributes:
        found: bool (F, 4).
        statistic: float64 (F, 4); chi-square of one degree of freedom when nothing changes.
        border: int64 (F, 4); blocks before the likeliest place.
        size: float64 (F, 4); of the change, from before to after: share of the amplitude, radians,
            symbol periods, ratio of noise powers.
    """

    found: NDArray[np.bool_]
    statistic: NDArray[np.float64]
    border: NDArray[np.int64]
    size: NDArray[np.float64]


def evidence(
    scores: NDArray[np.float64], channels: int, slope_energy: float, step: float
) -> Evidence:
    """Test the frames of a batch.

    Args:
        scores: float64 (F, B, 6), of `block_scores`.
        channels: Nr.
        slope_energy: of the filter bank.
        step: samples per symbol period.
    """
    frames, blocks = scores.shape[:2]
    shape = (frames, len(NAMES))
    if blocks < 2:
        none = np.zeros(shape)
        return Evidence(none > 0, none, none.astype(np.int64), none)
    with np.errstate(divide="ignore", invalid="ignore"):
        statistic, border, size = _changes(scores, channels, slope_energy, step)
    found = statistic > scipy.stats.chi2.isf(CHANCE, 1)
    ratio = np.maximum(size[:, 3], 1.0 / np.maximum(size[:, 3], 1e-300))
    found &= np.column_stack([np.abs(size[:, :3]) > LEAST[:3], ratio > LEAST[3]])
    return Evidence(found, statistic, border, size)


def ends_early(
    symbols: NDArray[np.complex64],
    channel: NDArray[np.complex128],
    noise: NDArray[np.float64],
    vectors: NDArray[np.complex128],
) -> NDArray[np.bool_]:
    """Frames whose last payload vectors hold nothing but noise, bool (F,).

    Likelihood ratio of silence against the mixture of all codewords, over the last 1 to `_LAST`
    vectors: exceeds 1/p with a probability below p each (Markov's inequality).

    Args:
        symbols: complex64 (F, Kp, Nr), scaled to codewords of amplitude 1.
        channel: complex128 (F, Nr, Nt).
        noise: float64 (F,); N0.
        vectors: complex128 (C, Nt); the codebook.
    """
    channels = symbols.shape[2]
    power = np.sum(np.abs(symbols[:, -1].astype(np.complex128)) ** 2, axis=1)
    # More than this is not noise: chance below 1e-4 up to 16 channels.
    quiet = np.flatnonzero(power < noise * (channels + 12.0 + 2.0 * np.sqrt(channels)))
    early = np.zeros(symbols.shape[0], np.bool_)
    if not quiet.size:
        return early
    last = symbols[quiet, -_LAST:].astype(np.complex128)
    points = vectors @ channel[quiet].transpose(0, 2, 1)  # (n, C, Nr)
    near = 2.0 * np.real(last @ points.conj().transpose(0, 2, 1))
    near -= np.sum(np.abs(points) ** 2, axis=2)[:, None]
    scaled = near / np.maximum(noise[quiet], 1e-300)[:, None, None]
    mixture = logsumexp(scaled, axis=2) - np.log(len(vectors))
    worth = np.cumsum(-mixture[:, ::-1], axis=1)
    early[quiet] = worth.max(axis=1) > -np.log(CHANCE)
    return early


def _changes(
    scores: NDArray[np.float64], channels: int, slope_energy: float, step: float
) -> tuple[NDArray[np.float64], NDArray[np.int64], NDArray[np.float64]]:
    total = np.cumsum(scores, axis=1)
    whole = total[:, -1]
    periods = whole[:, :1]
    noise = whole[:, 2:3] / (channels * periods)
    before, energy = total[:, :-1], total[:, :-1, 1]
    share = energy / whole[:, 1:2]
    kept = np.maximum(energy * (1.0 - share), 1e-300)  # what tells a difference of means
    mean_power = whole[:, 1:2] / periods
    statistic: list[NDArray[np.float64]] = []
    border: list[NDArray[np.int64]] = []
    size: list[NDArray[np.float64]] = []
    for kind, scale in ((3, 1.0), (4, 1.0), (5, slope_energy)):
        departure = before[:, :, kind] - share * whole[:, None, kind]
        variance = 0.5 * noise * scale * kept
        if kind == 5:  # symbols on either side of a border reach across it
            variance += 2.0 * (mean_power / step) ** 2
        jump = -departure / (scale * kept)  # mean after, less mean before
        _enter(
            departure**2 / variance, jump / (step if kind == 5 else 1.0), statistic, border, size
        )
    share = before[:, :, 0] / periods
    low = before[:, :, 2] / (channels * before[:, :, 0])
    high = (whole[:, 2:3] - before[:, :, 2]) / (channels * (periods - before[:, :, 0]))
    gain = np.log(noise) - share * np.log(low) - (1.0 - share) * np.log(high)
    ratio = np.where(low > 0, high / np.where(low > 0, low, 1.0), np.inf)
    audible = np.abs(high - low) > _FLOOR * mean_power / channels
    gain = np.where(audible, 2.0 * channels * periods * gain, 0.0)
    _enter(gain, ratio, statistic, border, size)
    return np.column_stack(statistic), np.column_stack(border), np.column_stack(size)


def _enter(
    values: NDArray[np.float64],
    sizes: NDArray[np.float64],
    statistic: list[NDArray[np.float64]],
    border: list[NDArray[np.int64]],
    size: list[NDArray[np.float64]],
) -> None:
    """The largest statistic of each frame, its border, and the size of the change there."""
    values = np.where(np.isfinite(values), values, 0.0)
    at = np.argmax(values, axis=1)
    row = np.arange(values.shape[0])
    statistic.append(values[row, at])
    border.append(at + 1)
    size.append(sizes[row, at])
