"""Recordings that stand out from the others of their group, by a robust rule, with the reason.

The modified z-score of B. Iglewicz and D. C. Hoaglin, "How to Detect and Handle Outliers" (1993):
0.6745 (x - median) / MAD beyond 3.5. MAD is the median absolute deviation from the median. Where
the group agrees more closely than the figure can be measured, the figure's own deviation takes the
MAD's place: nothing stands out by less than chance explains. Ratios are compared by logarithm.
"""

from __future__ import annotations

import math
from collections import defaultdict
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from spatiq.results.wording import number

LIMIT = 3.5
LEAST_GROUP = 8  # the median of fewer says little
_TO_STD = 1.4826  # of a normal law's MAD


@dataclass(frozen=True)
class Figure:
    """A figure that is compared.

    Attributes:
        name: in words.
        unit: of value and median as shown.
        least: smallest standard deviation that is believed, in the scale compared on.
    """

    name: str
    unit: str
    least: float


# Least deviations in dB, Hz, ppm and shares are common practice for bench recordings, no source.
FIGURES = {
    "ber": Figure("bit error ratio", "", 0.1),
    "evm_db": Figure("EVM", "dB", 0.2),
    "snr_db": Figure("SNR", "dB", 0.2),
    "cfo_hz": Figure("carrier offset", "Hz", 1.0),
    "clock_ppm": Figure("clock offset", "ppm", 0.2),
    "lost_share": Figure("share of frames lost", "", 0.01),
    "outage": Figure("outage", "", 0.01),
}


def compared(row: dict[str, Any]) -> dict[str, tuple[float, float, float]]:
    """Figures of a row of the view `night`: value as shown, value as compared, own deviation."""
    out: dict[str, tuple[float, float, float]] = {}
    bits, errors = row["bits_compared"], row["bit_errors"]
    if bits:
        # Half an error more keeps the logarithm finite; bits of a word err together, hence the 2.
        ratio = (errors + 0.5) / (bits + 1.0)
        out["ber"] = ratio, math.log10(ratio), 2.0 / math.log(10) / math.sqrt(errors + 0.5)
    if row["evm_percent"]:
        value = 20.0 * math.log10(row["evm_percent"] / 100.0)
        out["evm_db"] = value, value, 0.0
    for name in ("snr_db", "cfo_hz", "clock_ppm"):
        if row[name] is not None:
            out[name] = row[name], row[name], 0.0
    for name, part, of in (
        ("lost_share", "frames_lost", "frames_expected"),
        ("outage", "outage_frames", "outage_of"),
    ):
        if row[of]:
            share = row[part] / row[of]
            out[name] = share, share, _deviation(row[part], row[of])
    return out


def _deviation(part: int, of: int) -> float:
    """Standard deviation of a share, half a count added on either side: never 0."""
    share = (part + 0.5) / (of + 1.0)
    return math.sqrt(share * (1.0 - share) / of)


def find_standouts(
    rows: Sequence[dict[str, Any]], antennas: Sequence[dict[str, Any]] = ()
) -> list[dict[str, Any]]:
    """Rows of the table `standouts`.

    Args:
        rows: of the view `night`; each measurement counts once.
        antennas: of the table `antennas`.
    """
    values: dict[tuple[str, str], dict[str, tuple[float, float, float]]] = defaultdict(dict)
    group_of = {}
    for row in rows:
        group_of[row["measurement"]] = row["group_name"]
        for name, figures in compared(row).items():
            values[row["group_name"], name][row["measurement"]] = figures
    for row in antennas:
        group = group_of.get(row["measurement"])
        if group is not None and row["power_db"] is not None:
            name = f"power of antenna {row['antenna']}"
            power = row["power_db"]
            values[group, name][row["measurement"]] = power, power, 0.0
    found = [
        _standout(key, "frames_found", 0.0, None, None, "no frame was found")
        for key in sorted({r["measurement"] for r in rows if not r["frames_found"]})
    ]
    for (_, name), compared_figures in sorted(values.items()):
        figure = FIGURES.get(name, Figure(name, "dB", 0.2))
        if len(compared_figures) >= LEAST_GROUP:
            found += _outside(name, figure, compared_figures)
    return found


def _outside(
    name: str, figure: Figure, figures: dict[str, tuple[float, float, float]]
) -> list[dict[str, Any]]:
    scale = np.array([f[1] for f in figures.values()])
    middle = float(np.median(scale))
    typical = float(np.median([f[0] for f in figures.values()]))
    spread = _TO_STD * float(np.median(np.abs(scale - middle)))
    found = []
    for measurement, (shown, value, own) in sorted(figures.items()):
        score = (value - middle) / max(spread, own, figure.least)
        if abs(score) > LIMIT:
            reason = (
                f"{figure.name} {number(shown, figure.unit)}, where {len(figures)} recordings "
                f"have {number(typical, figure.unit)} in the middle: "
                f"{abs(score):.1f} robust deviations {'above' if score > 0 else 'below'}"
            )
            found.append(_standout(measurement, name, shown, typical, score, reason))
    return found


def _standout(
    measurement: str,
    figure: str,
    value: float,
    typical: float | None,
    score: float | None,
    reason: str,
) -> dict[str, Any]:
    return {
        "measurement": measurement,
        "figure": figure,
        "value": value,
        "typical": typical,
        "score": score,
        "reason": reason,
    }
