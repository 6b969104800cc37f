"""Bits and antennas as decided against those expected, and how well the antennas can be told."""

from __future__ import annotations

from itertools import combinations
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spatiq.acceptance.figure_kinds import Figure
from spatiq.acceptance.observation import ObservedFrames
from spatiq.acceptance.pooling import Pooling
from spatiq.link.description import Link
from spatiq.metrics.intervals import clopper_pearson
from spatiq.metrics.prediction import predict_ber

Sums = dict[str, NDArray[Any]]
Floats = NDArray[np.float64]
_MOST_WORDS = 256  # beyond, pairs of words are too many to go through
_COUNTS = ("bits_compared", "bit_errors", "periods_compared", "antenna_errors")


def mapping_sums(frames: ObservedFrames, link: Link, snr_db: float | None) -> Sums:
    """Counts, correlations (F, pairs), distances and predictions (F,)."""
    columns = frames.columns
    sums: Sums = {name: columns[name] for name in _COUNTS}
    gain = frames.fit.gain
    size = np.sqrt(np.sum(np.abs(gain) ** 2, axis=1))
    product = np.abs(np.einsum("fra,frb->fab", gain.conj(), gain))
    with np.errstate(divide="ignore", invalid="ignore"):
        correlation = product / (size[:, :, None] * size[:, None, :])
    pairs = list(combinations(range(link.antennas), 2))
    sums["correlation"] = (
        np.stack([correlation[:, a, b] for a, b in pairs], axis=1)
        if pairs
        else (np.zeros((frames.count, 0)))
    )
    amplitude = float(np.sqrt(np.mean(link.layout.payload_amplitude**2)))
    sums["distance"] = _distance(gain * amplitude, columns["noise_power"], link)
    sums["predicted_ber"] = columns["predicted_ber"]
    sums["predicted_ber_at_snr"] = np.full(frames.count, np.nan)
    if snr_db is not None and frames.count:
        noise = columns["signal_power"] / 10 ** (snr_db / 10)
        zeros = np.zeros((frames.count, link.antennas))
        sums["predicted_ber_at_snr"] = predict_ber(
            gain * amplitude, noise, zeros, link.codebook
        ).ber
    return sums


def _distance(gain: NDArray[np.complex128], noise: Floats, link: Link) -> Floats:
    """Smallest ||H (x - x')|| over sqrt(N0), (F,)."""
    vectors = link.codebook.vectors
    if len(vectors) > _MOST_WORDS or len(vectors) < 2:
        return np.full(len(gain), np.nan)
    first, second = np.triu_indices(len(vectors), 1)
    differences = np.unique(np.round(vectors[first] - vectors[second], 12), axis=0)
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.array(
            [
                np.sqrt(np.min(np.sum(np.abs(differences @ h.T) ** 2, axis=1)) / n)
                for h, n in zip(gain, noise, strict=True)
            ]
        )


def mapping_figures(sums: Sums, pooling: Pooling, link: Link) -> list[Figure | None]:
    """Error ratios with exact binomial intervals; means over frames for the rest."""
    figures: list[Figure | None] = []
    for name, errors, trials in (
        ("bit_error_ratio", "bit_errors", "bits_compared"),
        ("antenna_error_ratio", "antenna_errors", "periods_compared"),
    ):
        wrong, compared = int(sums[errors].sum()), int(sums[trials].sum())
        if compared:
            low, high = clopper_pearson([wrong], [compared], pooling.confidence)
            ends = (float(low[0]), float(high[0]))
            frames = int(np.sum(sums[trials] > 0))
            figures.append(pooling.between(name, "", wrong / compared, ends, frames))
    for i, (a, b) in enumerate(combinations(range(link.antennas), 2)):
        values = np.asarray(sums["correlation"][:, i], float)
        figures.append(pooling.of_mean("signature_correlation", f"{a}-{b}", values))
    for name, column in (
        ("smallest_distance", "distance"),
        ("predicted_ber", "predicted_ber"),
        ("predicted_ber_at_snr", "predicted_ber_at_snr"),
    ):
        figures.append(pooling.of_mean(name, "", np.asarray(sums[column], float)))
    return figures
