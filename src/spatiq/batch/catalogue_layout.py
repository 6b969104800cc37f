"""The catalogue's tables, stated once: SQL and catalogue.md are derived from `TABLES`.

To add a figure: a `Field` here, filled in records.py; then
`python -m spatiq.batch.catalogue_layout` brings catalogue.md up to date.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

LAYOUT_VERSION = 1


@dataclass(frozen=True)
class Field:
    """One column: name, SQL type, unit and meaning."""

    name: str
    kind: str
    unit: str
    meaning: str


@dataclass(frozen=True)
class TableOf:
    """One table: what a row is, its columns, and those that make its key."""

    row: str
    key: tuple[str, ...]
    fields: tuple[Field, ...]


def _text(name: str, meaning: str) -> Field:
    return Field(name, "TEXT", "", meaning)


def _count(name: str, meaning: str, unit: str = "") -> Field:
    return Field(name, "INTEGER", unit, meaning)


def _figure(name: str, unit: str, meaning: str) -> Field:
    return Field(name, "REAL", unit, meaning)


_KEY = _text("measurement", "the measurement")

RECORDINGS = TableOf(
    "a recording as it was last seen",
    ("path", "member"),
    (
        _text("path", "its metadata file, collection or archive, absolute"),
        _text("member", "which recording of an archive; empty for others"),
        _text("name", "base name"),
        _text("state", "measured, failed, growing, left out"),
        _text("reason", "why it is not measured; empty when it is"),
        _text("measurement", "its measurement; missing when there is none"),
        _text("link", "link description, absolute path; empty when no rule fitted"),
        _text("asked", "digest of link, options and program: what it was to be measured with"),
        _text("fingerprint", "digest of its files' sizes and times of change"),
        _text("content", "SHA-256 over metadata and data; missing when they were not read"),
        _count("bytes", "size of its files", "bytes"),
        _count("attempts", "times that measuring it failed since it last changed"),
        _text("changed_at", "when this row last changed, UTC, ISO 8601"),
    ),
)

MEASUREMENTS = TableOf(
    "a measurement: a recording's content on a link with options",
    ("measurement",),
    (
        _text("measurement", "digest of content, link, options and program version"),
        _text("results_file", "HDF5 file with everything, relative to the catalogue"),
        _text("link_name", "name of the link description"),
        _text("group_name", "digest of link and options: only such measurements are compared"),
        _text("recorded_at", "UTC of the first sample, ISO 8601; missing when not stated"),
        _figure("duration_s", "s", "from first to last sample, gaps counted"),
        _figure("sample_rate_hz", "Hz", "sample rate"),
        _count("channels", "receive channels"),
        _figure("carrier_hz", "Hz", "carrier frequency; missing when not stated"),
        _count("frames_expected", "frames found and lost"),
        _count("frames_found", "frames in the results"),
        _count("frames_lost", "frames listed as lost; why: table losses"),
        _count("bits_compared", "payload bits with a known value", "bits"),
        _count("bit_errors", "of these, wrong", "bits"),
        _figure("ber", "", "bit_errors / bits_compared; missing when nothing was compared"),
        _figure("ber_low", "", "lower end of its exact binomial interval"),
        _figure("ber_high", "", "upper end: the figure to quote at zero errors"),
        _figure("confidence", "", "level of the interval"),
        _figure("predicted_ber", "", "of a maximum-likelihood receiver on the measured channel"),
        _count("periods_compared", "payload periods whose word is known", "symbol periods"),
        _count("antenna_errors", "of these, wrong antenna", "symbol periods"),
        _figure("evm_error_energy", "", "sum of |y - h s|^2: add to pool EVM"),
        _figure("evm_reference_energy", "", "sum of |h s|^2"),
        _figure("evm_percent", "%", "EVM rms"),
        _figure("snr_db", "dB", "mean over the frames"),
        _figure("cfo_hz", "Hz", "carrier offset, weighted mean over the frames"),
        _figure("cfo_drift_hz_per_s", "Hz/s", "slope of the carrier offset over time"),
        _figure("cfo_drift_std_hz_per_s", "Hz/s", "its standard deviation"),
        _figure("clock_ppm", "ppm", "symbol clock offset, mean over the frames"),
        _figure("outage_bound", "", "BER above which a frame counts as out"),
        _count("outage_frames", "frames with BER above the bound, and frames not found"),
        _count("outage_of", "frames judged: those with a BER, and those not found"),
        _figure("outage", "", "outage_frames / outage_of: share of time out"),
        _figure("coherence_time_s", "s", "time after which the channel's correlation is below 0.5"),
        _text("summary", "all figures of the whole recording, JSON"),
        _text("measured_at", "when the measurement began, UTC, ISO 8601"),
        _figure("seconds", "s", "processor time that measuring took, all workers"),
        _count("peak_bytes", "most memory that a worker had taken so far", "bytes"),
    ),
)

TABLES: dict[str, TableOf] = {
    "recordings": RECORDINGS,
    "measurements": MEASUREMENTS,
    "losses": TableOf(
        "a reason for lost frames",
        ("measurement", "reason"),
        (_KEY, _text("reason", "why"), _count("frames", "how many")),
    ),
    "antennas": TableOf(
        "a transmit antenna of a measurement",
        ("measurement", "antenna"),
        (
            _KEY,
            _count("antenna", "transmit antenna, from 0"),
            _figure("power_db", "dB", "mean of |h|^2 over frames and channels, 0 dB: full scale"),
            _figure("evm_percent", "%", "EVM rms of what it sent"),
        ),
    ),
    "confusion": TableOf(
        "an element of the antenna confusion matrix that is not 0",
        ("measurement", "sent", "decided"),
        (
            _KEY,
            _text("sent", 'antenna set sent, as in "0" or "0+3"'),
            _text("decided", "antenna set decided"),
            _count("periods", "how often; add to pool", "symbol periods"),
        ),
    ),
    "trend": TableOf(
        "a stretch of time of a measurement, all of equal length",
        ("measurement", "bin"),
        (
            _KEY,
            _count("bin", "running index from 0"),
            _figure("start_s", "s", "its beginning, from the first sample"),
            _figure("seconds", "s", "its length"),
            _count("frames_found", "frames that begin in it"),
            _count("frames_lost", "frames lost in it"),
            _count("bits_compared", "payload bits with a known value", "bits"),
            _count("bit_errors", "of these, wrong", "bits"),
            _figure("evm_error_energy", "", "sum of |y - h s|^2"),
            _figure("evm_reference_energy", "", "sum of |h s|^2"),
            _figure("cfo_hz", "Hz", "carrier offset, mean"),
            _figure("snr_db", "dB", "SNR, mean"),
            _count("outage_frames", "as in measurements"),
            _count("outage_of", "as in measurements"),
        ),
    ),
    "correlation": TableOf(
        "the channel's correlation with itself some frames later",
        ("measurement", "frames_apart"),
        (
            _KEY,
            _count("frames_apart", "frames between the two estimates"),
            _figure("lag_s", "s", "mean time between them"),
            _figure("correlation", "", "0 to 1, carrier phase left out, corrected for noise"),
            _count("pairs", "pairs of frames behind it"),
        ),
    ),
    "standouts": TableOf(
        "a figure in which a measurement stands out from its group",
        ("measurement", "figure"),
        (
            _KEY,
            _text("figure", "which"),
            _figure("value", "", "its value"),
            _figure("typical", "", "median of the group"),
            _figure("score", "", "distance from it in robust standard deviations"),
            _text("reason", "the same in words"),
        ),
    ),
    "runs": TableOf(
        "a run of the batch command",
        ("run",),
        (
            _text("run", "random name"),
            _text("began_at", "UTC, ISO 8601"),
            _text("ended_at", "UTC, ISO 8601; missing while it runs, or when it was killed"),
            _text("program", "name and version"),
            _text("host", "machine and process"),
            _text("workers", "where the work was done"),
            _count("measured", "recordings measured in it"),
            _count("failed", "recordings that failed in it"),
            _count("put_off", "recordings put off in it"),
        ),
    ),
}

# Columns that tell when and how work was done: two runs over the same recordings differ in them.
HOW_AND_WHEN = frozenset(
    {"changed_at", "measured_at", "seconds", "peak_bytes", "attempts", "began_at", "ended_at"}
)


def sql() -> str:
    """Statements that make the tables."""
    statements = []
    for name, table in TABLES.items():
        columns = ", ".join(f"{f.name} {f.kind}" for f in table.fields)
        key = ", ".join(table.key)
        statements.append(f"CREATE TABLE IF NOT EXISTS {name} ({columns}, PRIMARY KEY ({key}));")
    statements.append("CREATE TABLE IF NOT EXISTS layout (version INTEGER);")
    statements.append(
        "CREATE VIEW IF NOT EXISTS night AS SELECT recordings.path, recordings.member, "
        "recordings.name, recordings.bytes, measurements.* FROM recordings JOIN measurements "
        "USING (measurement) WHERE recordings.state = 'measured';"
    )
    return "\n".join(statements)


_INTRODUCTION = f"""# The catalogue

`catalogue.sqlite` in the results folder of `spatiq batch` is an SQLite database, layout version
{LAYOUT_VERSION} (table `layout`). It may be read at any time, also while a run writes to it. Do not
write to it.

`recordings` says what became of each recording; `measurements` holds the figures. The view `night`
joins the two: a row for each measured recording, with path, member, name, bytes and all columns of
`measurements`. Results of a recording as it was before it changed stay in `measurements`. A figure
that could not be measured is NULL, never 0. Pool ratios by adding counts:

    SELECT SUM(bit_errors) * 1.0 / SUM(bits_compared) FROM night;
    SELECT name, frames_lost, reason, frames FROM night JOIN losses USING (measurement);
    SELECT path, reason FROM recordings WHERE state = 'failed';
    SELECT sent, decided, SUM(periods) FROM night JOIN confusion USING (measurement)
        GROUP BY sent, decided;
"""


def document() -> str:
    """The text of catalogue.md."""
    parts = [_INTRODUCTION]
    for name, table in TABLES.items():
        parts.append(f"## {name}\n\nA row is {table.row}; key: {', '.join(table.key)}.\n")
        parts.append("| column | type | unit | meaning |\n| --- | --- | --- | --- |")
        rows = [f"| {f.name} | {f.kind} | {f.unit} | {f.meaning} |" for f in table.fields]
        parts.append("\n".join(rows).replace("|^2", "\\|^2").replace("of |", "of \\|") + "\n")
    return "\n".join(parts)


if __name__ == "__main__":
    Path(__file__).with_name("catalogue.md").write_text(document(), encoding="utf-8")
