"""The night at a glance: figures over all recordings, pooled from counts and energies."""

from __future__ import annotations

import math
from collections import Counter, defaultdict
from typing import Any

from spatiq.batch.catalogue import Catalogue
from spatiq.batch.standouts import find_standouts
from spatiq.metrics.intervals import clopper_pearson

_CONFIDENCE = 0.95


def refresh_standouts(catalogue: Catalogue) -> int:
    """Compare all recordings anew and enter those that stand out; how many figures do."""
    rows = catalogue.rows("SELECT * FROM night ORDER BY path, member")
    found = find_standouts(rows, catalogue.rows("SELECT * FROM antennas"))
    catalogue.replace_table("standouts", found)
    return len(found)


def night_figures(catalogue: Catalogue) -> dict[str, Any]:
    """Everything at a glance: states, then pooled figures of each group, plain numbers.

    A measurement of two recordings of the same content counts once.
    """
    states = Counter({r["state"]: r["n"] for r in catalogue.rows(_STATES)})
    groups: dict[str, list[dict[str, Any]]] = defaultdict(list)
    seen = set()
    for row in catalogue.rows("SELECT * FROM night ORDER BY recorded_at, path, member"):
        if row["measurement"] not in seen:
            seen.add(row["measurement"])
            groups[row["group_name"]].append(row)
    return {
        "recordings": dict(sorted(states.items())),
        "bytes": sum(r["bytes"] for rows in groups.values() for r in rows),
        "groups": [_group(catalogue, rows) for _, rows in sorted(groups.items())],
        "failed": catalogue.rows(
            "SELECT path, member, reason FROM recordings WHERE state = 'failed' "
            "ORDER BY path, member"
        ),
        "standouts": catalogue.rows(
            "SELECT DISTINCT name, figure, value, typical, score, reason FROM standouts "
            "JOIN night USING (measurement) "
            "ORDER BY score IS NOT NULL, ABS(score) DESC, name, figure"
        ),
    }


_STATES = "SELECT state, COUNT(*) AS n FROM recordings GROUP BY state"


def _group(catalogue: Catalogue, rows: list[dict[str, Any]]) -> dict[str, Any]:
    """Pooled figures of the measurements of one link and one set of options."""
    keys = {row["measurement"] for row in rows}
    total = {name: sum(row[name] for row in rows) for name in _ADDED}
    error = math.fsum(row["evm_error_energy"] or 0.0 for row in rows)
    reference = math.fsum(row["evm_reference_energy"] or 0.0 for row in rows)
    drifts = [abs(r["cfo_drift_hz_per_s"]) for r in rows if r["cfo_drift_hz_per_s"] is not None]
    return {
        "link": rows[0]["link_name"],
        "recordings": len(rows),
        "seconds": math.fsum(row["duration_s"] for row in rows),
        "frames": {
            "expected": total["frames_expected"],
            "found": total["frames_found"],
            "lost": total["frames_lost"],
            "lost_by_reason": _losses(catalogue, keys),
        },
        "ber": ratio(total["bit_errors"], total["bits_compared"]),
        "antenna_error_ratio": ratio(total["antenna_errors"], total["periods_compared"]),
        "evm_percent": 100 * math.sqrt(error / reference) if reference > 0 else None,
        "cfo_hz": _range([row["cfo_hz"] for row in rows]),
        "largest_drift_hz_per_s": max(drifts, default=None),
        "clock_ppm": _range([row["clock_ppm"] for row in rows]),
        "snr_db": _range([row["snr_db"] for row in rows]),
        "outage": {
            "bound": rows[0]["outage_bound"],
            "frames": total["outage_frames"],
            "of": total["outage_of"],
            "value": total["outage_frames"] / total["outage_of"] if total["outage_of"] else None,
        },
        "coherence_time_s": _range([row["coherence_time_s"] for row in rows]),
        "antennas": _antennas(catalogue, keys),
        "confusion": _confusion(catalogue, keys),
    }


_ADDED = (
    "frames_expected",
    "frames_found",
    "frames_lost",
    "bits_compared",
    "bit_errors",
    "periods_compared",
    "antenna_errors",
    "outage_frames",
    "outage_of",
)


def ratio(errors: int, trials: int) -> dict[str, Any] | None:
    """A pooled ratio with its exact binomial interval; None when there were no trials."""
    if not trials:
        return None
    low, high = clopper_pearson(errors, trials, _CONFIDENCE)
    return {
        "value": errors / trials,
        "low": float(low),
        "high": float(high),
        "errors": errors,
        "compared": trials,
        "is_upper_bound": errors == 0,
    }


def _range(values: list[float | None]) -> dict[str, float] | None:
    known = sorted(v for v in values if v is not None)
    if not known:
        return None
    half = len(known) // 2
    middle = known[half] if len(known) % 2 else (known[half - 1] + known[half]) / 2
    return {"min": known[0], "median": middle, "max": known[-1]}


def _losses(catalogue: Catalogue, keys: set[str]) -> dict[str, int]:
    reasons: Counter[str] = Counter()
    for row in catalogue.rows("SELECT * FROM losses"):
        if row["measurement"] in keys:
            reasons[row["reason"]] += row["frames"]
    return dict(sorted(reasons.items()))


def _antennas(catalogue: Catalogue, keys: set[str]) -> list[dict[str, Any]]:
    powers: dict[int, list[float | None]] = defaultdict(list)
    for row in catalogue.rows("SELECT * FROM antennas"):
        if row["measurement"] in keys:
            powers[row["antenna"]].append(row["power_db"])
    return [{"antenna": a, "power_db": _range(values)} for a, values in sorted(powers.items())]


def _confusion(catalogue: Catalogue, keys: set[str]) -> dict[str, dict[str, int]]:
    """Counts added over the measurements: sent -> decided -> symbol periods."""
    total: dict[str, dict[str, int]] = defaultdict(lambda: defaultdict(int))
    for row in catalogue.rows("SELECT * FROM confusion"):
        if row["measurement"] in keys:
            total[row["sent"]][row["decided"]] += row["periods"]
    return {
        sent: dict(sorted(decided.items(), key=lambda e: _order(e[0])))
        for sent, decided in sorted(total.items(), key=lambda e: _order(e[0]))
    }


def _order(name: str) -> tuple[int, ...]:
    return tuple(int(part) for part in name.split("+") if part.isdigit())
