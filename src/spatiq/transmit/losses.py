"""Samples lost in an overflow: what the recorder did not write, and whether it says so."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError
from spatiq.transmit.front_end import Samples

MOST_GAPS = 1_000_000


@dataclass(frozen=True)
class Losses:
    """Runs of samples that are not in the file; the same on all receive channels.

    Attributes:
        at: (first lost sample, how many), on the sampling clock.
        random: how many further runs at random places.
        length: samples lost in each of those: a number, or (lowest, highest), drawn uniformly.
        marked: True writes captures whose core:global_index tells the gaps (SigMF 1.2); False drops
            samples silently.
    """

    at: Sequence[tuple[int, int]] = ()
    random: int = 0
    length: int | tuple[int, int] = 1000
    marked: bool = True

    def gaps(self, rng: np.random.Generator, n_samples: int) -> NDArray[np.int64]:
        """All runs, int64 (G, 2), first lost sample and count; ascending, merged where they touch.

        Raises:
            InputError: runs outside the recording, or nothing left of it.
        """
        low, high = self.length if isinstance(self.length, tuple) else (self.length, self.length)
        if not 0 <= self.random <= MOST_GAPS or len(self.at) > MOST_GAPS:
            raise InputError("lost samples", "runs", self.random, f"0 to {MOST_GAPS}")
        if self.random and not 1 <= low <= high < n_samples:
            expected = f"1 to {n_samples - 1} samples, lower end first"
            raise InputError("lost samples", "length", self.length, expected)
        for first, count in self.at:
            if not (first >= 0 and count >= 1 and first + count <= n_samples):
                expected = f"runs within samples 0 to {n_samples - 1}"
                raise InputError("lost samples", "place", f"{first}:{count}", expected)
        counts = rng.integers(low, high, self.random, endpoint=True)
        firsts = np.floor(rng.uniform(0, 1, self.random) * (n_samples - counts)).astype(np.int64)
        runs = [*self.at, *zip(firsts.tolist(), counts.tolist(), strict=True)]
        merged: list[list[int]] = []
        for first, count in sorted(runs):
            if merged and first <= sum(merged[-1]):
                merged[-1][1] = max(sum(merged[-1]), first + count) - merged[-1][0]
            else:
                merged.append([first, count])
        if sum(count for _, count in merged) >= n_samples:
            raise InputError("lost samples", "runs", "every sample lost", "some that are kept")
        return np.array(merged, np.int64).reshape(-1, 2)


def kept(samples: Samples, first: int, gaps: NDArray[np.int64]) -> Samples:
    """What is recorded of a chunk (Nr, n) that begins with sample `first` of the sampling clock."""
    stop = first + samples.shape[1]
    ends = gaps[:, 0] + gaps[:, 1]
    low = int(np.searchsorted(ends, first, "right"))
    high = int(np.searchsorted(gaps[:, 0], stop, "left"))
    if low >= high:
        return samples
    wanted = np.ones(samples.shape[1], np.bool_)
    for k in range(low, high):
        wanted[max(0, int(gaps[k, 0]) - first) : max(0, int(ends[k]) - first)] = False
    return np.ascontiguousarray(samples[:, wanted])


def spread(samples: Samples, gaps: NDArray[np.int64], n_clock: int) -> Samples:
    """Recorded samples (Nr, n) back on the sampling clock, zeros for lost ones: (Nr, n_clock)."""
    present = np.ones(n_clock, np.bool_)
    for start, count in gaps:
        present[start : start + count] = False
    out = np.zeros((samples.shape[0], n_clock), np.complex64)
    out[:, present] = samples
    return out


def recorded_index(places: NDArray[np.float64], gaps: NDArray[np.int64]) -> NDArray[np.float64]:
    """Instants on the sampling clock -> sample numbers in the file; NaN for lost ones.

    Args:
        places: float64, any shape.
        gaps: int64 (G, 2); see `Losses.gaps`.
    """
    places = np.asarray(places, np.float64)
    if not len(gaps):
        return places
    before = np.searchsorted(gaps[:, 0], places, "right")
    lost = np.concatenate([[0], np.cumsum(gaps[:, 1])])[before]
    ends = np.concatenate([[-np.inf], gaps[:, 0] + gaps[:, 1]])[before]
    return np.where(places < ends, np.nan, places - lost)


def capture_segments(
    gaps: NDArray[np.int64], n_recorded: int, carrier_hz: float | None
) -> list[dict[str, Any]]:
    """The captures array that tells the gaps: core:sample_start and core:global_index."""
    starts = gaps[:, 0] - np.concatenate([[0], np.cumsum(gaps[:, 1])])[:-1]
    after = gaps[:, 0] + gaps[:, 1]
    pairs = [(0, 0), *zip(starts.tolist(), after.tolist(), strict=True)]
    # A gap at the very start or end leaves a capture without samples: the later one tells all.
    at_start: dict[int, int] = dict(pairs)
    segments = []
    for start, index in at_start.items():
        if start < n_recorded:
            segment: dict[str, Any] = {"core:sample_start": start, "core:global_index": index}
            if carrier_hz is not None:
                segment["core:frequency"] = carrier_hz
            segments.append(segment)
    return segments
