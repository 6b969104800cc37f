"""What people ask the catalogue most: rows ready to be printed or exported."""

from __future__ import annotations

import csv
import json
from collections.abc import Iterable, Iterator
from pathlib import Path
from typing import Any

from spatiq.batch.catalogue import Catalogue
from spatiq.batch.catalogue_layout import TABLES
from spatiq.batch.night import night_figures
from spatiq.errors import InputError
from spatiq.results.plain import json_text
from spatiq.results.whole_files import whole_file

# Order of `list` -> SQL.
ORDERS = {
    "time": "recorded_at IS NULL, recorded_at, path, member",
    "name": "name, path, member",
    "ber": "ber IS NULL, ber DESC, bit_errors DESC, path, member",
    "lost": "frames_lost * 1.0 / MAX(frames_expected, 1) DESC, path, member",
    "outage": "outage IS NULL, outage DESC, path, member",
}
_OF_MEASUREMENT = ("losses", "antennas", "confusion", "trend", "correlation", "standouts")


def listed(catalogue: Catalogue, order: str) -> list[dict[str, Any]]:
    """A row for each measured recording, in one of `ORDERS`.

    Raises:
        InputError: no such order.
    """
    if order not in ORDERS:
        raise InputError("--sort", "", order, f"one of {', '.join(ORDERS)}")
    return catalogue.rows(f"SELECT * FROM night ORDER BY {ORDERS[order]}")


def not_measured(catalogue: Catalogue) -> list[dict[str, Any]]:
    """Recordings that failed, are growing or were left out, with their reasons."""
    return catalogue.rows(
        "SELECT path, member, name, state, reason, attempts FROM recordings "
        "WHERE state != 'measured' ORDER BY state, path, member"
    )


def one_recording(catalogue: Catalogue, name: str) -> dict[str, Any]:
    """All that is known of a recording, by its path or base name.

    Raises:
        InputError: none of that name, or several.
    """
    rows = catalogue.rows(
        "SELECT * FROM recordings WHERE path = ?1 OR name = ?1 OR path || ':' || member = ?1 "
        "ORDER BY path, member",
        [name],
    )
    if len(rows) != 1:
        found = "nothing" if not rows else ", ".join(_label(row) for row in rows[:5])
        raise InputError(catalogue.path, name, found, "the name or path of one recording")
    row = rows[0]
    key = row["measurement"]
    measured = catalogue.rows("SELECT * FROM measurements WHERE measurement = ?", [key])
    details = {
        table: catalogue.rows(f"SELECT * FROM {table} WHERE measurement = ?", [key])
        for table in _OF_MEASUREMENT
    }
    return {"recording": row, "measurement": measured[0] if measured else None, **details}


def _label(row: dict[str, Any]) -> str:
    return f"{row['path']}:{row['member']}" if row["member"] else str(row["path"])


def export_csv(catalogue: Catalogue, folder: Path, *, overwrite: bool = False) -> list[Path]:
    """Each table as NAME.csv in a folder, under a line of column names; a missing figure is empty.

    Raises:
        InputError: the folder is not there, or files are and `overwrite` is not asked for.
    """
    written = []
    for name, table in TABLES.items():
        path = folder / f"{name}.csv"
        order = ", ".join(table.key)
        rows = catalogue.rows(f"SELECT * FROM {name} ORDER BY {order}")
        with whole_file(path, overwrite=overwrite) as partial:
            _write_rows(partial, [field.name for field in table.fields], rows)
        written.append(path)
    return written


def _write_rows(path: Path, names: list[str], rows: Iterable[dict[str, Any]]) -> None:
    with path.open("w", encoding="utf-8", newline="") as file:
        table = csv.writer(file, lineterminator="\n")
        table.writerow(names)
        table.writerows([row[name] for name in names] for row in rows)


def export_json(catalogue: Catalogue, path: Path, *, overwrite: bool = False) -> None:
    """The night's figures and each recording with its figures as one JSON object.

    Raises:
        InputError: as `export_csv`.
    """
    document = {
        "night": night_figures(catalogue),
        "recordings": list(_recordings(catalogue)),
    }
    with whole_file(path, overwrite=overwrite) as partial:
        partial.write_text(json_text(document) + "\n", encoding="utf-8")


def _recordings(catalogue: Catalogue) -> Iterator[dict[str, Any]]:
    details: dict[str, dict[str, list[dict[str, Any]]]] = {}
    for table in _OF_MEASUREMENT:
        order = ", ".join(TABLES[table].key)
        for row in catalogue.rows(f"SELECT * FROM {table} ORDER BY {order}"):
            key = row.pop("measurement")
            details.setdefault(key, {}).setdefault(table, []).append(row)
    query = (
        "SELECT * FROM recordings LEFT JOIN measurements USING (measurement) ORDER BY path, member"
    )
    for row in catalogue.rows(query):
        summary = row.pop("summary")
        row["summary"] = json.loads(summary) if summary else None
        yield row | details.get(row["measurement"], {})
