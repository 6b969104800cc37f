"""What the catalogue keeps of one measurement, taken from its results file."""

from __future__ import annotations

import json
import math
from pathlib import Path
from typing import Any

import numpy as np

from spatiq.batch.drift import (
    channel_correlation,
    coherence_time,
    outage,
    trend,
    weighted_slope,
)
from spatiq.recording.recording import Recording
from spatiq.results.reader import Results, open_results
from spatiq.results.wording import antenna_set, pick

_COLUMNS = (
    "time_s",
    "bits_compared",
    "bit_errors",
    "ber",
    "evm_error_energy",
    "evm_reference_energy",
    "cfo_hz",
    "cfo_std_hz",
    "snr_db",
)
_MOST_CHANNELS = 4096  # frames whose channel is looked at, evenly spread

Tables = dict[str, list[dict[str, Any]]]


def measurement_tables(
    path: Path, key: str, group: str, recording: Recording, bound: float
) -> Tables:
    """Rows of all tables of a measurement; when and how it was done is left missing.

    Args:
        path: results file.
        key: the measurement's.
        group: digest of link and options.
        recording: it is of.
        bound: BER above which a frame counts as out.
    """
    with open_results(path) as results:
        summary = results.summary
        columns = {name: results.column(name) for name in _COLUMNS}
        lost = list(results.lost())
        reasons = [frame.reason for frame in lost]
        shift = np.array([s.global_index - s.start for s in recording.segments], np.float64)
        shift -= recording.segments[0].global_index
        places = [frame.start_sample + shift[frame.segment] for frame in lost]
        correlation = _correlation(results, columns["time_s"])
        out = outage(columns["ber"], reasons, bound)
        cfo, drift, drift_std = weighted_slope(
            columns["time_s"], columns["cfo_hz"], columns["cfo_std_hz"]
        )
        duration = _duration(recording)
        row = (
            _figures(summary)
            | _origin(path, results, recording)
            | {
                "measurement": key,
                "group_name": group,
                "evm_error_energy": float(np.nansum(columns["evm_error_energy"])),
                "evm_reference_energy": float(np.nansum(columns["evm_reference_energy"])),
                "duration_s": duration,
                "cfo_hz": _missing(cfo),
                "cfo_drift_hz_per_s": _missing(drift),
                "cfo_drift_std_hz_per_s": _missing(drift_std),
                "outage_bound": bound,
                "outage_frames": out.out,
                "outage_of": out.judged,
                "outage": out.share,
                "coherence_time_s": coherence_time(correlation),
            }
        )
        bins = trend(columns, np.array(places) / recording.sample_rate, reasons, duration, bound)
        tables: Tables = {
            "losses": [
                {"reason": reason, "frames": n}
                for reason, n in summary["frames"]["lost_by_reason"].items()
            ],
            "antennas": _antennas(summary),
            "confusion": _confusion(results),
            "trend": bins,
            "correlation": correlation,
        }
    for rows in tables.values():
        for one in rows:
            one["measurement"] = key
    return {"measurements": [row], **tables}


def _duration(recording: Recording) -> float:
    last, first = recording.segments[-1], recording.segments[0]
    return (last.global_index + last.count - first.global_index) / recording.sample_rate


def _origin(path: Path, results: Results, recording: Recording) -> dict[str, Any]:
    started = recording.time_at(0)
    carrier = results.provenance["carrier_hz"]
    return {
        "results_file": f"{path.parent.name}/{path.name}",
        "link_name": results.provenance["link_name"],
        "recorded_at": None if started is None else str(started),
        "sample_rate_hz": recording.sample_rate,
        "channels": recording.channels,
        "carrier_hz": float(carrier) if carrier else None,
        "summary": json.dumps(results.summary, sort_keys=True),
        "measured_at": results.provenance["measured_at"],
        "seconds": None,
        "peak_bytes": None,
    }


def _figures(summary: dict[str, Any]) -> dict[str, Any]:
    """Figures that the summary holds, under the catalogue's names."""
    ber = summary["ber"]
    antenna = summary["antenna_error_ratio"]
    evm = summary["evm"]
    return {
        "frames_expected": summary["frames"]["expected"],
        "frames_found": summary["frames"]["found"],
        "frames_lost": summary["frames"]["lost"],
        "bits_compared": pick(ber, "compared") or 0,
        "bit_errors": pick(ber, "errors") or 0,
        "ber": pick(ber, "value"),
        "ber_low": pick(ber, "low"),
        "ber_high": pick(ber, "high"),
        "confidence": summary["confidence"],
        "predicted_ber": summary["predicted_ber"],
        "periods_compared": pick(antenna, "compared") or 0,
        "antenna_errors": pick(antenna, "errors") or 0,
        "evm_percent": pick(evm, "percent"),
        "snr_db": pick(summary["snr_db"], "mean"),
        "clock_ppm": pick(summary["clock_ppm"], "mean"),
    }


def _antennas(summary: dict[str, Any]) -> list[dict[str, Any]]:
    rows = []
    for antenna in summary["antennas"]:
        power = antenna["power"]
        rows.append(
            {
                "antenna": antenna["antenna"],
                "power_db": 10 * math.log10(power) if power else None,
                "evm_percent": antenna["evm_percent"],
            }
        )
    return rows


def _confusion(results: Results) -> list[dict[str, Any]]:
    names = [antenna_set(members) for members in results.antenna_sets]
    total = results.confusion_total
    return [
        {"sent": names[a], "decided": names[b], "periods": int(total[a, b])}
        for a, b in zip(*np.nonzero(total), strict=True)
    ]


def _correlation(results: Results, time: np.ndarray[Any, Any]) -> list[dict[str, Any]]:
    """Over a stretch of frames that follow on one another, from the middle of the recording."""
    first = max(0, (results.count - _MOST_CHANNELS) // 2)
    stop = first + _MOST_CHANNELS
    channel = results.channel(first, stop)
    variance = results.rows("channel/error_variance", first, stop)
    return channel_correlation(channel, variance, time[first:stop])


def _missing(value: float) -> float | None:
    return value if math.isfinite(value) else None
