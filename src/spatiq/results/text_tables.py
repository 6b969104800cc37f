"""Tables of the terminal view: antenna confusion, transmit antennas, frames."""

from __future__ import annotations

import json
import math
from typing import Any

import numpy as np
from rich import box
from rich.table import Table

from spatiq.results.reader import Results
from spatiq.results.wording import (
    DASH,
    count,
    fixed,
    marks_text,
    plus_minus,
    ratio,
)

# A wider matrix does not fit a screen: its most frequent confusions are listed instead.
_WIDEST_MATRIX = 8
_LISTED = 12


def _table(*headings: str) -> Table:
    table = Table(box=box.SIMPLE_HEAD, show_edge=False, pad_edge=False, header_style="dim")
    table.add_column("  ")
    for heading in headings:
        table.add_column(heading, justify="right", no_wrap=True)
    return table


def _share(part: int, whole: int) -> str:
    """Share in percent; "0 %" and "100 %" only when they are exact."""
    if not whole:
        return DASH
    percent = 100 * part / whole
    if 0 < percent < 0.01:
        return "<0.01 %"
    if 99.99 < percent < 100:
        return ">99.99 %"
    return f"{percent:.4g} %"


def confusion_table(results: Results) -> Table | None:
    """Counts and row shares; None when no symbol period could be compared."""
    matrix = results.confusion_total
    if not matrix.any():
        return None
    names = list(results.set_names)
    sent = matrix.sum(axis=1)
    if len(names) > _WIDEST_MATRIX:
        return _frequent_confusions(matrix, names)
    table = _table(*names)
    for row, name in enumerate(names):
        cells = [
            f"{count(int(n))}  {_share(int(n), int(sent[row])):>8}" if n else DASH
            for n in matrix[row]
        ]
        table.add_row(f"  {name}", *cells)
    return table


def _frequent_confusions(matrix: np.ndarray[Any, Any], names: list[str]) -> Table:
    sent = matrix.sum(axis=1)
    right = int(np.trace(matrix))
    table = _table("sent", "decided", "words", "share of sent")
    table.add_row("  right", "", "", count(right), _share(right, int(sent.sum())))
    wrong = matrix - np.diag(np.diag(matrix))
    order = np.argsort(-wrong, axis=None, kind="stable")[:_LISTED]
    for row, column in zip(*np.unravel_index(order, matrix.shape), strict=True):
        n = int(wrong[row, column])
        if n:
            table.add_row("  wrong", names[row], names[column], count(n), _share(n, int(sent[row])))
    return table


def antenna_table(summary: dict[str, Any]) -> Table | None:
    """EVM and received power of each transmit antenna; None when the summary has no antennas."""
    antennas = summary.get("antennas")
    if not antennas:
        return None
    timed = any(row.get("delay_symbols") is not None for row in antennas)
    delays = ("delay, symbol periods", "delay, ns") if timed else ()
    table = _table("EVM rms %", "power, dB of full scale", *delays)
    for row in antennas:
        power = row["power"]
        decibel = 10 * math.log10(power) if power else None
        table.add_row(
            f"  {row['antenna']}",
            fixed(row["evm_percent"]),
            fixed(decibel),
            *(
                plus_minus(row.get(f"delay_{unit}"), row.get(f"delay_std_{unit}"))
                for unit in (("symbols", "ns") if timed else ())
            ),
        )
    return table


def channel_table(summary: dict[str, Any]) -> Table | None:
    """Levels and delay of each receive channel; None when the summary has none."""
    channels = summary.get("receive_channels")
    if not channels:
        return None
    table = _table(
        "carries", "signal, dB of full scale", "noise", "SNR dB", "delay, samples", "delay, ns"
    )
    for row in channels:
        levels = (row["signal_power"], row["noise_power"])
        table.add_row(
            f"  {row['channel']}",
            row["state"] or DASH,
            *(fixed(10 * math.log10(x) if x else None) for x in levels),
            fixed(row["snr_db"]),
            plus_minus(row["delay_samples"], row["delay_std_samples"]),
            plus_minus(row["delay_ns"], row["delay_std_ns"]),
        )
    return table


def receive_table(summary: dict[str, Any]) -> Table | None:
    """Front end of each receive channel; None when nothing of it was estimated."""
    channels = summary.get("front_end")
    if not channels:
        return None
    table = _table("Q over I, dB", "off quadrature, degrees", "image rejection", "DC over signal")
    for row in channels:
        certain = row["image_rejection_low_db"]
        shown = fixed(row["image_rejection_db"], "dB", decimals=1)
        # An image within its own uncertainty is no measured figure: only that it is below.
        if certain is not None and row["image_rejection_db"] - certain > 3:
            shown = f"above {certain:.1f} dB"
        table.add_row(
            f"  {row['channel']}",
            _with_spread(row["iq_gain_db"], row["iq_gain_std_db"]),
            _with_spread(row["iq_phase_deg"], row["iq_phase_std_deg"]),
            shown,
            fixed(row["dc_db"], "dB", decimals=1),
        )
    return table


def _with_spread(value: float | None, spread: float | None) -> str:
    """Value and standard deviation, to two digits of the latter."""
    if value is None or spread is None:
        return DASH
    digits = min(max(1 - math.floor(math.log10(spread)), 0), 6) if spread > 0 else 6
    return f"{value:.{digits}f} ± {spread:.{digits}f}"


_FRAME_HEADINGS = (
    "start, samples",
    "SNR dB",
    "CFO Hz",
    "clock ppm",
    "EVM %",
    "BER",
    "wrong bits",
    "wrong antennas",
    "CRC",
    "marks",
)


def frames_table(results: Results, rows: int) -> Table | None:
    """The first frames; None when there are none to show."""
    shown = min(rows, results.count)
    if shown <= 0:
        return None
    table = _table(*_FRAME_HEADINGS)
    columns = {name: results.column(name, 0, shown).tolist() for name in results.column_names}
    flags = json.loads(results.file["frames/marks"].attrs["flags"])
    for i in range(shown):
        row = {name: values[i] for name, values in columns.items()}
        compared = row["bits_compared"] > 0
        periods = row["periods_compared"] > 0
        table.add_row(
            f"  {row['frame']}",
            f"{row['start_sample']:.1f}",
            fixed(row["snr_db"]),
            fixed(row["cfo_hz"], decimals=1),
            fixed(row["clock_ppm"]),
            fixed(row["evm_percent"]),
            ratio(row["ber"], row["ber_high"], row["bit_errors"] if compared else None),
            count(row["bit_errors"]) if compared else DASH,
            count(row["antenna_errors"]) if periods else DASH,
            {1: "ok", 0: "failed"}.get(row["crc_ok"], DASH),
            marks_text(row["marks"], flags),
        )
    return table
