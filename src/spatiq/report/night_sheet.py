"""The sheet of a night: a strip of time, what stands out, what failed, and each recording."""

from __future__ import annotations

from collections.abc import Mapping
from datetime import datetime
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spatiq.batch.catalogue import Catalogue
from spatiq.batch.night import night_figures
from spatiq.batch.queries import listed, not_measured
from spatiq.report.plots import Panel, Plot, Series, Table
from spatiq.report.recording_sheet import LinkedTable, Sheet
from spatiq.results.wording import DASH, count, interval, number, printable, ratio, ratio_of

_MOST_LISTED = 2000

Row = dict[str, Any]


def night_sheet(catalogue: Catalogue, pages: Mapping[str, str]) -> Sheet:
    """Everything that the page of a night shows.

    Args:
        catalogue: of a batch.
        pages: measurement -> address of its recording's page; those without one are not linked.
    """
    night = night_figures(catalogue)
    rows = listed(catalogue, "time")
    failed, standouts = not_measured(catalogue), night["standouts"]
    return Sheet(
        "night",
        printable(catalogue.path.resolve().parent.name),
        _word(night, standouts),
        _sentence(night, rows, standouts),
        _facts(night, rows),
        [],
        _figures(night["groups"]),
        [_strip(rows)] if rows else [],
        tables=[
            _standouts(rows, standouts, pages),
            LinkedTable("failed", "What was not measured?", _failures(failed)),
            _recordings(rows, pages),
        ],
    )


def _word(night: Row, standouts: list[Row]) -> str:
    failed = night["recordings"].get("failed", 0)
    if not night["recordings"].get("measured"):
        return "Nothing measured"
    odd = len({row["name"] for row in standouts})
    parts = [f"{count(odd)} stand out"] if odd else []
    parts += [f"{count(failed)} failed"] if failed else []
    return ", ".join(parts) or "Nothing stands out"


def _sentence(night: Row, rows: list[Row], standouts: list[Row]) -> str:
    states = ", ".join(f"{count(n)} {state}" for state, n in night["recordings"].items())
    parts = [f"Recordings: {states or 'none'}"]
    for group in night["groups"]:
        frames = group["frames"]
        told = (
            f"link {printable(group['link'])}: {count(frames['found'])} of"
            f" {count(frames['expected'])} frames found, bit error ratio {ratio_of(group['ber'])}"
        )
        expected = _predicted(rows, group["link"])
        parts.append(f"{told}, where theory expects {number(expected)}" if expected else told)
    if standouts:
        first = standouts[0]
        parts.append(f"most of all stands out {printable(first['name'])}")
    return "; ".join(parts) + "."


def _predicted(rows: list[Row], link: str) -> float | None:
    """Mean prediction over a link's recordings, by the bits that the measured ratio counts."""
    known = [
        (r["predicted_ber"], r["bits_compared"])
        for r in rows
        if r["link_name"] == link and r["predicted_ber"] is not None and r["bits_compared"]
    ]
    bits = sum(n for _, n in known)
    return sum(p * n for p, n in known) / bits if bits else None


def _facts(night: Row, rows: list[Row]) -> list[tuple[str, str]]:
    times = [r["recorded_at"] for r in rows if r["recorded_at"]]
    return [
        ("recordings", count(sum(night["recordings"].values()))),
        ("first", printable(min(times, default=DASH))),
        ("last", printable(max(times, default=DASH))),
        ("on the air", number(sum(g["seconds"] for g in night["groups"]), "s")),
        ("size measured", number(night["bytes"] / 1e6, "MB")),
    ]


def _figures(groups: list[Row]) -> Table:
    rows: list[tuple[str, ...]] = []
    for group in groups:
        ber, antenna, outage = group["ber"], group["antenna_error_ratio"], group["outage"]
        rows.append(
            ("link", printable(group["link"]), "", f"{count(group['recordings'])} recordings")
        )
        for label, figure, what in (
            ("  bit error ratio", ber, "bits"),
            ("  antenna errors", antenna, "periods"),
        ):
            if figure is None:
                rows.append((label, DASH, "", "nothing known to compare with"))
                continue
            worth = "upper bound (95 %)"
            if figure["errors"]:
                worth = f"{interval(figure['low'], figure['high'])} (95 %)"
            basis = f"{count(figure['errors'])} wrong of {count(figure['compared'])} {what}"
            rows.append((label, ratio_of(figure), worth, basis))
        rows.append(("  EVM rms", number(group["evm_percent"], "%"), "", "energies added"))
        for label, name, unit in (
            ("  SNR", "snr_db", "dB"),
            ("  carrier offset", "cfo_hz", "Hz"),
            ("  clock offset", "clock_ppm", "ppm"),
            ("  coherence time", "coherence_time_s", "s"),
        ):
            spread = group[name]
            if spread is not None:
                ends = interval(spread["min"], spread["max"], unit)
                rows.append((label, number(spread["median"], unit), ends, "median of recordings"))
        if outage["of"]:
            share = number(outage["value"]) if outage["frames"] else "none"
            basis = f"{count(outage['frames'])} of {count(outage['of'])} frames"
            rows.append(("  outage", share, f"BER above {number(outage['bound'])}", basis))
    return Table(("figure", "value", "worth", "rests on"), rows)


def _strip(rows: list[Row]) -> Plot:
    """Recordings over the time of day; by their order where times are not stated."""
    stamps = [_instant(r["recorded_at"]) for r in rows]
    dated = all(s is not None for s in stamps)
    # Milliseconds since 1970: the unit of time axes.
    x = np.array([s if s is not None else i for i, s in enumerate(stamps)], float)
    title = "time, UTC" if dated else "recording, in order"
    labels = [printable(r["name"]) for r in rows]
    wrong = np.array([r["bit_errors"] > 0 for r in rows])
    known = np.array([r["bits_compared"] > 0 for r in rows])
    panels = [
        Panel(
            title,
            "bit error ratio",
            [
                _series("measured", x, _values(rows, "ber"), wrong, labels),
                _series(
                    "no bit wrong: upper bound",
                    x,
                    _values(rows, "ber_high"),
                    known & ~wrong,
                    labels,
                    kind="bounds",
                ),
                Series("predicted", "line", x, _values(rows, "predicted_ber"), hue=1),
            ],
            log_y=True,
            dates=dated,
        )
    ]
    every = np.ones(len(rows), bool)
    for name, y_title in (
        ("evm_percent", "EVM, %"),
        ("snr_db", "SNR, dB"),
        ("cfo_hz", "carrier, Hz"),
        ("frames_lost", "frames lost"),
    ):
        series = _series("", x, _values(rows, name), every, labels)
        panels.append(Panel(title, y_title, [series], dates=dated))
    says = "Each point is a recording; the list below has them all, and leads to their pages."
    return Plot("strip", "How did the night go?", says, panels, shared_x=True)


def _series(
    name: str,
    x: NDArray[np.float64],
    y: NDArray[np.float64],
    use: NDArray[np.bool_],
    labels: list[str],
    *,
    kind: Any = "points",
) -> Series:
    return Series(
        name, kind, x[use], y[use], hints=[t for t, u in zip(labels, use, strict=True) if u]
    )


def _instant(text: str | None) -> float | None:
    return datetime.fromisoformat(text).timestamp() * 1e3 if text else None


def _values(rows: list[Row], name: str) -> NDArray[np.float64]:
    return np.array([np.nan if r[name] is None else r[name] for r in rows], float)


def _standouts(rows: list[Row], standouts: list[Row], pages: Mapping[str, str]) -> LinkedTable:
    by_name = {r["name"]: pages.get(r["measurement"], "") for r in rows}
    shown = standouts[:_MOST_LISTED]
    cells = [(printable(s["name"]), printable(s["reason"])) for s in shown]
    table = Table(("recording", "why"), cells, "" if cells else "Nothing stands out.")
    addresses = [by_name.get(s["name"], "") for s in shown]
    return LinkedTable("standouts", "What stands out?", table, addresses)


def _failures(failed: list[Row]) -> Table:
    rows = [
        (
            printable(r["name"] + (f":{r['member']}" if r["member"] else "")),
            printable(r["state"]),
            printable(r["reason"]),
        )
        for r in failed[:_MOST_LISTED]
    ]
    note = "" if rows else "All recordings were measured."
    return Table(("recording", "state", "reason"), rows, note)


def _recordings(rows: list[Row], pages: Mapping[str, str]) -> LinkedTable:
    shown = rows[:_MOST_LISTED]
    cells = [
        (
            printable(r["name"]),
            printable((r["recorded_at"] or DASH)[:19]),
            count(r["frames_found"]),
            count(r["frames_lost"]),
            ratio(r["ber"], r["ber_high"], r["bit_errors"]),
            number(r["predicted_ber"]),
            number(r["evm_percent"]),
            number(r["snr_db"]),
            number(r["cfo_hz"], digits=4),
        )
        for r in shown
    ]
    headings = (
        "recording", "recorded", "frames", "lost", "BER", "predicted", "EVM %", "SNR dB",
        "carrier Hz",
    )  # fmt: skip
    note = f"The first {len(shown)} of {len(rows)}." if len(shown) < len(rows) else ""
    addresses = [pages.get(r["measurement"], "") for r in shown]
    return LinkedTable("recordings", "All recordings", Table(headings, cells, note), addresses)
