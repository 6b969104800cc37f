"""The night at a glance, on standard output."""

from __future__ import annotations

from typing import Any

from rich.table import Table
from rich.text import Text

from spatiq.cli.printing import wide_console
from spatiq.results.wording import (
    DASH,
    count,
    fixed,
    interval,
    listing,
    number,
    pick,
    printable,
    ratio_of,
)

_MOST_LISTED = 20


def print_night(figures: dict[str, Any]) -> None:
    """States, pooled figures of each link, what stands out, what failed."""
    console = wide_console()
    states = ", ".join(f"{count(n)} {state}" for state, n in figures["recordings"].items())
    console.print(Text(f"recordings: {states or 'none'}", "bold"))
    for group in figures["groups"]:
        console.print()
        console.print(Text(f"link {printable(group['link'])}", "bold"))
        console.print(_group_table(group))
        if group["confusion"]:
            console.print(Text("  antenna sent (rows) and decided (columns): share of row"))
            console.print(_confusion_table(group["confusion"]))
    for title, rows in (("stands out", figures["standouts"]), ("failed", figures["failed"])):
        if rows:
            console.print()
            console.print(Text(title, "bold"))
            for row in rows[:_MOST_LISTED]:
                name = row.get("name") or row["path"] + (
                    f":{row['member']}" if row["member"] else ""
                )
                console.print(Text(f"  {printable(name)}: {printable(row['reason'])}"))
            if len(rows) > _MOST_LISTED:
                more = f"  {len(rows) - _MOST_LISTED} more: spatiq catalogue"
                console.print(Text(more, "dim"))


def _group_table(group: dict[str, Any]) -> Table:
    table = Table.grid(padding=(0, 3))
    for style in ("", "bold", "", "dim"):
        table.add_column(style=style)
    frames, ber, antenna = group["frames"], group["ber"], group["antenna_error_ratio"]
    losses = f"{count(frames['lost'])} lost" if frames["lost"] else "none lost"
    outage = group["outage"]
    rows = [
        (
            "recordings",
            count(group["recordings"]),
            f"{number(group['seconds'], 's')} on the air",
            "",
        ),
        (
            "frames found",
            f"{count(frames['found'])} of {count(frames['expected'])}",
            losses,
            listing(frames["lost_by_reason"]),
        ),
        ("bit error ratio", ratio_of(ber), _worth(ber), _basis(ber, "bits")),
        ("antenna errors", ratio_of(antenna), _worth(antenna), _basis(antenna, "words")),
        ("EVM rms", number(group["evm_percent"], "%"), "", "energies added over all frames"),
        ("SNR", *_spread(group["snr_db"], "dB"), "of recordings' means"),
        ("carrier offset", *_spread(group["cfo_hz"], "Hz"), "of recordings' means"),
        ("largest drift", number(group["largest_drift_hz_per_s"], "Hz/s"), "", ""),
        ("clock offset", *_spread(group["clock_ppm"], "ppm"), "of recordings' means"),
        (
            "outage",
            number(outage["value"]) if outage["frames"] else DASH if not outage["of"] else "none",
            "",
            f"{count(outage['frames'])} of {count(outage['of'])} frames with BER above "
            f"{number(outage['bound'])} or not found",
        ),
        ("coherence time", *_spread(group["coherence_time_s"], "s"), "correlation below 0.5"),
    ]
    for antenna_row in group["antennas"]:
        label = f"antenna {antenna_row['antenna']} power"
        rows.append((label, *_spread(antenna_row["power_db"], "dB"), "0 dB: full scale"))
    for label, figure, worth, basis in rows:
        table.add_row(f"  {label}", figure, worth, basis)
    return table


def _spread(figures: Any, unit: str) -> tuple[str, str]:
    if figures is None:
        return DASH, ""
    return number(figures["median"], unit, 4), interval(figures["min"], figures["max"], unit)


def _worth(ratio: Any) -> str:
    if ratio is None:
        return ""
    if ratio["is_upper_bound"]:
        return "upper bound (95 %)"
    return f"{interval(ratio['low'], ratio['high'])} (95 %)"


def _basis(ratio: Any, what: str) -> str:
    if ratio is None:
        return "nothing known to compare with"
    return f"{count(pick(ratio, 'errors'))} wrong of {count(pick(ratio, 'compared'))} {what}"


def _confusion_table(confusion: dict[str, dict[str, int]]) -> Table:
    names = sorted({d for row in confusion.values() for d in row} | set(confusion), key=_order)
    table = Table.grid(padding=(0, 2))
    for _ in range(len(names) + 1):
        table.add_column(justify="right")
    table.add_row("", *names)
    for sent in names:
        row = confusion.get(sent, {})
        total = sum(row.values())
        cells = [fixed(100 * row[d] / total, "%", 3) if row.get(d) else DASH for d in names]
        table.add_row(f"  {sent}", *cells)
    return table


def _order(name: str) -> tuple[int, ...]:
    return tuple(int(part) for part in name.split("+") if part.isdigit())
