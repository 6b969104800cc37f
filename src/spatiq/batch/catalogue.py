"""The catalogue: what became of each recording, in SQLite. Short transactions, one writer a run.

Rollback journal and full synchronisation: a transaction is whole or absent whatever is killed or
unplugged, and the file works where a write-ahead log's shared memory does not (network drives).
"""

from __future__ import annotations

import os
import sqlite3
from collections.abc import Iterable, Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from spatiq.batch.catalogue_layout import LAYOUT_VERSION, TABLES, sql
from spatiq.errors import InputError

FILE_NAME = "catalogue.sqlite"
_WAIT_S = 60.0  # for another run's transaction
Row = Mapping[str, Any]


def catalogue_path(place: Path) -> Path:
    """The catalogue of a results folder; a catalogue itself is its own."""
    return place / FILE_NAME if place.is_dir() else place


class Catalogue:
    """An open catalogue; a context manager. Made by `open_catalogue`."""

    def __init__(self, path: Path, connection: sqlite3.Connection) -> None:
        self.path = path
        self._connection = connection
        connection.row_factory = sqlite3.Row

    def __enter__(self) -> Catalogue:
        """Itself."""
        return self

    def __exit__(self, *_: object) -> None:
        """Close it."""
        self._connection.close()

    def rows(self, query: str, values: Iterable[Any] = ()) -> list[dict[str, Any]]:
        """Rows of a query, each as a dictionary.

        Raises:
            InputError: the query or the file is at fault.
        """
        with self._faults():
            return [dict(row) for row in self._connection.execute(query, tuple(values))]

    def put(self, **tables: Iterable[Row]) -> None:
        """Enter rows into tables, in place of rows of the same key: all of them, or none.

        Raises:
            InputError: the file cannot be written.
        """
        with self._changing() as connection:
            for name, rows in tables.items():
                for row in rows:
                    _put(connection, name, row)

    def replace_measurement(self, measurement: str, tables: Mapping[str, Iterable[Row]]) -> None:
        """Enter all that is known of a measurement, in place of what was there."""
        with self._changing() as connection:
            for name, rows in tables.items():
                if name != "recordings":
                    connection.execute(f"DELETE FROM {name} WHERE measurement = ?", [measurement])
                for row in rows:
                    _put(connection, name, row)

    def replace_table(self, name: str, rows: Iterable[Row]) -> None:
        """Enter rows in place of all that a table held."""
        with self._changing() as connection:
            connection.execute(f"DELETE FROM {name}")
            for row in rows:
                _put(connection, name, row)

    @contextmanager
    def _changing(self) -> Iterator[sqlite3.Connection]:
        with self._faults():
            self._connection.execute("BEGIN IMMEDIATE")
            try:
                yield self._connection
            except BaseException:
                self._connection.execute("ROLLBACK")
                raise
            self._connection.execute("COMMIT")

    @contextmanager
    def _faults(self) -> Iterator[None]:
        try:
            yield
        except sqlite3.Error as error:
            raise InputError(self.path, "", str(error), "a catalogue that works") from error


def _put(connection: sqlite3.Connection, name: str, row: Row) -> None:
    fields = [f.name for f in TABLES[name].fields]
    odd = row.keys() ^ set(fields)
    if odd:
        raise ValueError(f"{name}: columns missing or unknown: {sorted(odd)}")
    marks = ", ".join("?" * len(fields))
    columns = ", ".join(fields)
    values = [row[f] for f in fields]
    connection.execute(f"INSERT OR REPLACE INTO {name} ({columns}) VALUES ({marks})", values)


def open_catalogue(place: Path, *, create: bool = False) -> Catalogue:
    """Open the catalogue of a results folder, or one by its name.

    Args:
        place: results folder or catalogue file.
        create: make it if it is not there, and open it for writing.

    Raises:
        InputError: absent, not a catalogue, of a newer layout, or not to be opened.
    """
    path = catalogue_path(place)
    expected = "a results folder of `spatiq batch`, or its catalogue"
    if not create and not path.is_file():
        raise InputError(path, "", "no such file", expected)
    # To read what a killed run left half-written, SQLite must undo it first: that takes writing.
    writable = os.access(path, os.W_OK) and os.access(path.parent, os.W_OK)
    mode = "rwc" if create else "rw" if writable else "ro"
    try:
        connection = sqlite3.connect(
            f"{path.resolve().as_uri()}?mode={mode}",
            uri=True,
            timeout=_WAIT_S,
            isolation_level=None,
            check_same_thread=False,
        )
        if create:
            connection.execute("PRAGMA synchronous = FULL")
            connection.execute("BEGIN IMMEDIATE")
            for statement in sql().split(";\n"):
                connection.execute(statement)
            if connection.execute("SELECT COUNT(*) FROM layout").fetchone()[0] == 0:
                connection.execute("INSERT INTO layout VALUES (?)", [LAYOUT_VERSION])
            connection.execute("COMMIT")
        found = connection.execute("SELECT version FROM layout").fetchone()
    except sqlite3.Error as error:
        raise InputError(path, "", str(error), expected) from error
    if found is None or found[0] != LAYOUT_VERSION:
        version = "none" if found is None else found[0]
        raise InputError(path, "layout", version, f"version {LAYOUT_VERSION}")
    return Catalogue(path, connection)
