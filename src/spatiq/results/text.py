"""The terminal's view of a results file: whether it was good first, then where errors come from."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

from rich.console import Console
from rich.table import Table
from rich.text import Text

from spatiq.metrics.path_figures import SILENT
from spatiq.results.reader import Results
from spatiq.results.text_tables import (
    antenna_table,
    channel_table,
    confusion_table,
    frames_table,
    receive_table,
)
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

Line = tuple[str, str, str, str]

_NO_FRAME = (
    "No frame was found. Likely causes: a carrier offset beyond --cfo-range; a symbol rate or\n"
    "  sync section other than the link states; a sync section too weak for --false-alarm."
)


def show_results(results: Results, console: Console, *, rows: int = 20) -> None:
    """Print the summary, the antenna confusion, the antennas and the first `rows` frames."""
    summary = results.summary
    console.print(headline(results.provenance))
    console.print()
    console.print(summary_table(summary))
    if not results.count:
        console.print()
        console.print(Text(f"  {_NO_FRAME}"))
    for title, table in (
        (
            "antenna sent (rows) and decided (columns): words, share of row",
            confusion_table(results),
        ),
        ("transmit antennas", antenna_table(summary)),
        ("receive channels", channel_table(summary)),
        ("front end of the receive channels", receive_table(summary)),
        ("frames", frames_table(results, rows)),
    ):
        if table is not None:
            console.print()
            console.print(Text(f"  {title}", "bold"))
            console.print(table)
    hidden = results.count - rows
    if rows and hidden > 0:
        note = f"  {count(hidden)} more in {results.path.name}"
        console.print(Text(note, "dim"))


def headline(provenance: dict[str, str]) -> Text:
    """Which recording, on which link, how it was sampled."""
    rate = float(provenance["sample_rate_hz"])
    facts = (
        f"link {provenance['link_name']}, {provenance['channels']} receive channels, "
        f"{count(int(provenance['samples']))} samples at {number(rate / 1e6)} MHz"
    )
    return Text.assemble((printable(provenance["recording_name"]), "bold"), "  ", printable(facts))


def summary_table(summary: dict[str, Any]) -> Table:
    """Figure, what it is worth, and what it rests on, one line each."""
    table = Table.grid(padding=(0, 3))
    for style in ("", "bold", "", "dim"):
        table.add_column(style=style)
    for lines in (_errors(summary), _signal(summary), _frames(summary)):
        for label, figure, worth, basis in lines:
            table.add_row(f"  {label}", figure, worth, basis)
    return table


def _ratio_line(label: str, figures: Any, confidence: Any, what: str) -> Line:
    if pick(figures, "compared") in (None, 0):
        return label, DASH, "", "nothing known to compare with"
    level = "" if confidence is None else f" ({100 * confidence:g} %)"
    if pick(figures, "is_upper_bound") or pick(figures, "errors") == 0:
        worth = f"upper bound{level}"
    else:
        worth = interval(pick(figures, "low"), pick(figures, "high")) + level
    wrong, compared = count(pick(figures, "errors")), count(pick(figures, "compared"))
    return label, ratio_of(figures), worth, f"{wrong} wrong of {compared} {what}"


def _errors(summary: dict[str, Any]) -> Iterator[Line]:
    level = pick(summary, "confidence")
    yield _ratio_line("bit error ratio", summary.get("ber"), level, "bits")
    yield _ratio_line("  spatial bits", summary.get("ber_spatial"), level, "bits")
    yield _ratio_line("  signal bits", summary.get("ber_signal"), level, "bits")
    predicted = summary.get("predicted_ber")
    basis = "maximum likelihood on the measured channel and noise"
    yield "predicted", number(predicted), "", basis if predicted is not None else ""
    loss = summary.get("implementation_loss_db")
    worth = interval(pick(loss, "low"), pick(loss, "high"), "dB")
    yield "implementation loss", fixed(pick(loss, "value"), "dB"), worth, ""
    yield _ratio_line("antenna errors", summary.get("antenna_error_ratio"), level, "words")
    yield _ratio_line("symbol errors", summary.get("symbol_error_ratio"), level, "words")
    two_step = summary.get("two_step_ber")
    if pick(two_step, "compared"):
        yield _ratio_line("two-step detector", two_step, level, "bits")


def _evm_line(label: str, figures: Any, basis: str) -> Line:
    percent, decibel = pick(figures, "percent"), pick(figures, "db")
    return label, number(percent, "%"), number(decibel, "dB"), basis if percent else ""


def _evm_basis(evm: Any, found: int | None) -> str:
    aided = pick(evm, "data_aided_frames")
    if pick(evm, "data_aided"):
        return "data-aided"
    if aided and found:
        return f"data-aided in {count(aided)} of {count(found)} frames, else decided symbols"
    return "against decided symbols: flatters a poor link"


def _signal(summary: dict[str, Any]) -> Iterator[Line]:
    evm = summary.get("evm")
    yield _evm_line("EVM rms", evm, _evm_basis(evm, pick(summary, "frames", "found")))
    yield _evm_line("EVM rms, equalised", summary.get("equalised_evm"), "")
    yield from _subcarriers(summary.get("subcarriers"))
    snr = summary.get("snr_db")
    yield _spread_line("SNR", snr, "dB")
    cfo = _spread_line("carrier offset", summary.get("cfo_hz"), "Hz")
    ppm = pick(summary, "cfo_ppm", "mean")
    yield (*cfo[:3], "" if ppm is None else number(ppm, "ppm of the carrier"))
    yield _spread_line("clock offset", summary.get("clock_ppm"), "ppm")
    if summary.get("spectrum") == "inverted":
        yield "spectrum", "inverted", "", "samples conjugated, figures are those of the link"
    if summary.get("interferer_hz"):
        where = _spread_line("interferer at", summary["interferer_hz"], "Hz")
        level = number(pick(summary, "interferer_db", "mean"), "dB over the signal", digits=3)
        yield (*where[:3], level)
    yield from _motion(summary)


def _subcarriers(rows: Any) -> Iterator[Line]:
    """Where on a multicarrier link it is good and where it is not."""
    if not rows:
        return
    worst = max(rows, key=lambda row: float(row["evm_percent"]))
    best = min(float(row["evm_percent"]) for row in rows)
    span = interval(best, float(worst["evm_percent"]), "%")
    note = f"worst: subcarrier {worst['subcarrier']}, at {fixed(worst['power_db'], 'dB')} of power"
    yield f"  of {len(rows)} subcarriers", "", span, note


def _motion(summary: dict[str, Any]) -> Iterator[Line]:
    """How the channel was had, where it or the phase moved within frames."""
    models = summary.get("channel_models") or {}
    if not any(n for name, n in models.items() if name != "still"):
        return
    yield "channel within frames", listing(models), "", "frames, by how it was estimated"
    for label, name in (("Doppler spread", "doppler_spread_hz"), ("linewidth", "linewidth_hz")):
        if summary.get(name):
            yield (*_spread_line(label, summary[name], "Hz")[:3], "of frames that showed any")


def _spread_line(label: str, figures: Any, unit: str) -> Line:
    mean = number(pick(figures, "mean"), unit, digits=4)
    return label, mean, interval(pick(figures, "min"), pick(figures, "max"), unit), ""


def _frames(summary: dict[str, Any]) -> Iterator[Line]:
    frames = summary.get("frames")
    found, lost = pick(frames, "found"), pick(frames, "lost")
    expected = pick(frames, "expected")
    of = f" of {count(expected)}" if expected is not None else ""
    losses = f"{count(lost)} lost" if lost else "none lost"
    yield "frames found", f"{count(found)}{of}", losses, listing(pick(frames, "lost_by_reason"))
    marks = {name.lower().replace("_", " "): n for name, n in (summary.get("marks") or {}).items()}
    if any(marks.values()):
        hint = "echoes: see --channel dispersive" if marks.get("echoes") else ""
        yield "frames marked", listing(marks), "", hint
    silent = [c for c in summary.get("receive_channels") or [] if c["state"] in SILENT]
    if silent:
        told = ", ".join(f"{c['channel']} carried {c['state']}" for c in silent)
        yield "receive channels", told.replace("carried no ", "carried noise, no "), "", ""
    torn = summary.get("lost_inside_frames")
    if torn:
        missing = f"{count(torn['samples'])} samples in {count(torn['frames'])} frames"
        unknown = torn["frames_of_unknown_number"]
        more = f"number unknown in {count(unknown)} of them" if unknown else ""
        bits = f"{count(torn['bits_not_compared'])} bits not compared"
        yield "lost inside frames", missing, bits, more
    crc = summary.get("crc")
    passed, failed = pick(crc, "passed"), pick(crc, "failed")
    if passed or failed:
        yield "CRC", f"{count(passed)} passed", f"{count(failed)} failed", ""
