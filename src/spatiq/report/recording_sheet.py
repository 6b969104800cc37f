"""The sheet of one recording: what its page and its printed figures show, in the order asked."""

from __future__ import annotations

import json
from dataclasses import dataclass, field
from typing import Any

from spatiq.report.error_plots import ber_over_snr, confusion, error_positions, spatial_and_signal
from spatiq.report.gathered import Gathered, gather
from spatiq.report.plots import Plot, Table
from spatiq.report.sentence import sheet_facts, verdict
from spatiq.report.signal_plots import codebook_as_received, received_symbols
from spatiq.report.single_frames import single_frames
from spatiq.report.time_plots import channel_over_time, frames_over_time, timing_track
from spatiq.results.reader import Results
from spatiq.results.text import summary_table
from spatiq.results.wording import printable


@dataclass(frozen=True)
class Sheet:
    """What a page shows.

    Attributes:
        kind: "recording" or "night".
        title: of the page.
        word, sentence: whether it was good.
        facts: label and value, for the title block.
        cautions: lines that go with the sentence.
        figures: table of the figures in total.
        plots: in the order shown.
        frames: for the frame picker; empty: none.
        tables: further tables, each with a title and an anchor.
        back: address of the page that this one belongs to.
    """

    kind: str
    title: str
    word: str
    sentence: str
    facts: list[tuple[str, str]]
    cautions: list[str]
    figures: Table
    plots: list[Plot]
    frames: dict[str, Any] = field(default_factory=dict)
    tables: list[LinkedTable] = field(default_factory=list)
    back: str = ""


@dataclass(frozen=True)
class LinkedTable:
    """A table whose first cell may lead to another page: addresses, one for each row, or empty."""

    key: str
    title: str
    table: Table
    addresses: list[str] = field(default_factory=list)


_PLOTS = (
    frames_over_time,
    confusion,
    received_symbols,
    codebook_as_received,
    ber_over_snr,
    spatial_and_signal,
    channel_over_time,
    error_positions,
    timing_track,
)


def recording_plots(seen: Gathered) -> list[Plot]:
    """All plots of a recording in which at least one frame was found; else none."""
    return [plot(seen) for plot in _PLOTS] if seen.count else []


def recording_sheet(results: Results, *, back: str = "") -> Sheet:
    """Everything that the page of a recording shows."""
    seen = gather(results)
    summary, provenance = results.summary, results.provenance
    word, sentence = verdict(summary)
    cautions = [printable(w) for w in json.loads(provenance.get("recording_warnings") or "[]")]
    return Sheet(
        "recording",
        printable(provenance["recording_name"]),
        word,
        sentence,
        sheet_facts(provenance),
        cautions,
        _figures(summary),
        recording_plots(seen),
        single_frames(seen) if seen.count else {},
        back=back,
    )


def _figures(summary: dict[str, Any]) -> Table:
    """The terminal's summary, line for line."""
    columns = summary_table(summary).columns
    rows = [tuple(str(c) for c in cells) for cells in zip(*(c.cells for c in columns), strict=True)]
    return Table(("figure", "value", "worth", "rests on"), rows)
