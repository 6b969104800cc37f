"""Answers of the catalogue, on standard output."""

from __future__ import annotations

import sys
from typing import Any

from rich.table import Table
from rich.text import Text

from spatiq.cli.printing import wide_console
from spatiq.metrics.intervals import clopper_pearson
from spatiq.results.plain import json_text
from spatiq.results.wording import DASH, count, number, printable, ratio


def print_json(value: Any) -> None:
    """Strict JSON, and nothing else."""
    sys.stdout.write(json_text(value) + "\n")


def print_list(rows: list[dict[str, Any]]) -> None:
    """A line for each measured recording."""
    table = Table(box=None, pad_edge=False, padding=(0, 2), header_style="dim")
    table.add_column("recording")
    table.add_column("recorded")
    for name in ("frames", "lost", "BER", "EVM", "SNR", "carrier", "drift", "outage"):
        table.add_column(name, justify="right")
    for row in rows:
        table.add_row(
            printable(row["name"]),
            printable((row["recorded_at"] or DASH)[:19]),
            count(row["frames_found"]),
            count(row["frames_lost"]),
            ratio(row["ber"], row["ber_high"], row["bit_errors"]),
            number(row["evm_percent"], "%"),
            number(row["snr_db"], "dB"),
            number(row["cfo_hz"], "Hz", 4),
            number(row["cfo_drift_hz_per_s"], "Hz/s"),
            number(row["outage"]),
        )
    wide_console().print(table)


def print_failed(rows: list[dict[str, Any]]) -> None:
    """A line for each recording that is not measured."""
    console = wide_console()
    for row in rows:
        label = ":".join(part for part in (row["path"], row["member"]) if part)
        console.print(Text(f"{row['state']}: {printable(label)}"), soft_wrap=True)
        console.print(Text(f"    {printable(row['reason'])}"), soft_wrap=True)


def print_one(known: dict[str, Any]) -> None:
    """One recording: figures, what stands out, and the trend."""
    console = wide_console()
    recording, figures = known["recording"], known["measurement"]
    console.print(Text(printable(recording["path"]), "bold"))
    if figures is None:
        console.print(Text(f"  {recording['state']}: {printable(recording['reason'])}"))
        return
    left_out = {"measurement", "summary", "group_name", "ber", "ber_low", "ber_high"}
    facts = Table.grid(padding=(0, 3))
    facts.add_row(
        "  bit error ratio", ratio(figures["ber"], figures["ber_high"], figures["bit_errors"])
    )
    for name, value in figures.items():
        if name not in left_out and value is not None:
            text = number(value, digits=5) if isinstance(value, float) else printable(value)
            facts.add_row(f"  {name.replace('_', ' ')}", text)
    console.print(facts)
    for row in known["losses"]:
        console.print(Text(f"  lost: {count(row['frames'])} {printable(row['reason'])}"))
    for row in known["standouts"]:
        console.print(Text(f"  stands out: {printable(row['reason'])}", "bold"))
    console.print(_trend(known["trend"]))


def _trend(rows: list[dict[str, Any]]) -> Table:
    table = Table(box=None, pad_edge=False, padding=(0, 2), header_style="dim", title="over time")
    for name in ("from", "frames", "lost", "BER", "SNR", "carrier", "out"):
        table.add_column(name, justify="right")
    for row in rows:
        bits = row["bits_compared"]
        table.add_row(
            number(row["start_s"], "s"),
            count(row["frames_found"]),
            count(row["frames_lost"]),
            _ratio_of_counts(row["bit_errors"], bits),
            number(row["snr_db"], "dB"),
            number(row["cfo_hz"], "Hz", 4),
            f"{row['outage_frames']} of {row['outage_of']}",
        )
    return table


def _ratio_of_counts(errors: int, trials: int) -> str:
    """A ratio, or its upper bound where no error was seen."""
    if not trials:
        return DASH
    _, high = clopper_pearson(errors, trials, 0.95)
    return ratio(errors / trials, float(high), errors)
