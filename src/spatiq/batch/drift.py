"""Figures over the time of one recording: carrier drift, outage, the channel's memory, a trend."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spatiq.receiver.frame_batch import NOT_FOUND

TREND_BINS = 60
_MOST_PAIRS = 2000
_LAG_STEPS = 24
_ROWS = 1024


def weighted_slope(
    time: NDArray[np.float64], value: NDArray[np.float64], std: NDArray[np.float64]
) -> tuple[float, float, float]:
    """Mean, slope and the slope's standard deviation of a straight line through points.

    Weighted least squares; the deviation is from the residuals where there are three points or
    more, so that what the line does not describe widens it. NaN where there are too few points.

    Args:
        time, value: (F,).
        std: (F,), standard deviation of each value; points without one are left out.
    """
    good = np.isfinite(time) & np.isfinite(value) & np.isfinite(std) & (std > 0)
    t, y, w = time[good], value[good], 1.0 / std[good] ** 2
    if not t.size:
        return float("nan"), float("nan"), float("nan")
    total = w.sum()
    mean = float((w * y).sum() / total)
    middle = (w * t).sum() / total
    spread = float((w * (t - middle) ** 2).sum())
    if t.size < 2 or spread <= 0:
        return mean, float("nan"), float("nan")
    slope = float((w * (t - middle) * y).sum() / spread)
    if t.size < 3:
        return mean, slope, float(1.0 / np.sqrt(spread))
    rest = y - mean - slope * (t - middle)
    scale = float((w * rest**2).sum() / (t.size - 2))
    return mean, slope, float(np.sqrt(max(scale, 1.0) / spread))


@dataclass(frozen=True)
class Outage:
    """Frames out, of frames judged: a frame without a BER is not judged, one not found is out."""

    out: int
    judged: int

    @property
    def share(self) -> float | None:
        """Share of time out; None when nothing was judged."""
        return self.out / self.judged if self.judged else None


def outage(ber: NDArray[np.float64], reasons: list[str], bound: float) -> Outage:
    """Outage of frames with these BER, and of frames lost for these reasons.

    A frame cut off, in a gap or spoiled says nothing about the link and is not judged.
    """
    judged = np.isfinite(ber)
    missed = sum(reason == NOT_FOUND for reason in reasons)
    return Outage(int(np.count_nonzero(ber[judged] > bound)) + missed, int(judged.sum()) + missed)


def channel_correlation(
    channel: NDArray[np.complex128], variance: NDArray[np.float64], time: NDArray[np.float64]
) -> list[dict[str, Any]]:
    """Correlation of the channel with itself some frames later.

    At each distance the sum of |<H_i, H_j>| over pairs, over that of sqrt(E_i E_j), where E is the
    energy of an estimate less that of its own error: the carrier's phase, which differs from frame
    to frame, and the noise drop out. Correlation in time as W. C. Jakes, "Microwave Mobile
    Communications" (1974), chapter 1, has it, here of magnitudes.

    Args:
        channel: (F, Nr, Nt).
        variance: (F, Nt); variance of each coefficient's estimate.
        time: (F,), s.
    """
    count = channel.shape[0]
    if not count:
        return []
    flat = channel.reshape(count, -1)
    error = np.nan_to_num(variance).sum(axis=1) * channel.shape[1]
    energy = np.maximum(np.sum(np.abs(flat) ** 2, axis=1) - error, 0.0)
    rows = []
    lags = np.unique(np.geomspace(1, max(count - 1, 1), _LAG_STEPS).astype(np.int64))
    for apart in lags[lags < count].tolist():
        first = np.unique(np.linspace(0, count - 1 - apart, _MOST_PAIRS).astype(np.int64))
        second = first + apart
        products = np.abs(np.sum(flat[first].conj() * flat[second], axis=1))
        scale = float(np.sum(np.sqrt(energy[first] * energy[second])))
        if scale > 0:
            rows.append(
                {
                    "frames_apart": apart,
                    "lag_s": float(np.mean(time[second] - time[first])),
                    "correlation": min(float(products.sum()) / scale, 1.0),
                    "pairs": int(first.size),
                }
            )
    return rows


def coherence_time(rows: list[dict[str, Any]], level: float = 0.5) -> float | None:
    """Time after which the correlation first is below a level, between two lags on a line.

    None when it never is.
    """
    before = (0.0, 1.0)
    for row in rows:
        here = (row["lag_s"], row["correlation"])
        if here[1] < level:
            share = (before[1] - level) / (before[1] - here[1])
            return float(before[0] + share * (here[0] - before[0]))
        before = here
    return None


def trend(
    columns: dict[str, NDArray[Any]],
    lost_time: NDArray[np.float64],
    lost_reasons: list[str],
    duration: float,
    bound: float,
) -> list[dict[str, Any]]:
    """Counts and energies of equal stretches of time.

    Args:
        columns: of the frame table, (F,) each: time_s, bits, energies, cfo_hz, snr_db, ber.
        lost_time, lost_reasons: (L,) of frames lost.
        duration: of the recording, s.
        bound: BER above which a frame counts as out.
    """
    bins = max(1, min(TREND_BINS, columns["time_s"].size + lost_time.size))
    width = duration / bins
    where = np.clip((columns["time_s"] / width).astype(np.int64), 0, bins - 1)
    lost = np.clip((lost_time / width).astype(np.int64), 0, bins - 1)
    rows = []
    for k in range(bins):
        here = where == k
        reasons = [lost_reasons[i] for i in np.flatnonzero(lost == k)]
        out = outage(columns["ber"][here], reasons, bound)
        rows.append(
            {
                "bin": k,
                "start_s": k * width,
                "seconds": width,
                "frames_found": int(here.sum()),
                "frames_lost": len(reasons),
                "bits_compared": int(columns["bits_compared"][here].sum()),
                "bit_errors": int(columns["bit_errors"][here].sum()),
                "evm_error_energy": float(np.nansum(columns["evm_error_energy"][here])),
                "evm_reference_energy": float(np.nansum(columns["evm_reference_energy"][here])),
                "cfo_hz": _mean(columns["cfo_hz"][here]),
                "snr_db": _mean(columns["snr_db"][here]),
                "outage_frames": out.out,
                "outage_of": out.judged,
            }
        )
    return rows


def _mean(values: NDArray[np.float64]) -> float | None:
    finite = values[np.isfinite(values)]
    return float(finite.mean()) if finite.size else None
