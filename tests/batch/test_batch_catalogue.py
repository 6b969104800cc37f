"""The catalogue as a file: documented, whole after any kill, open to everybody's queries."""

from __future__ import annotations

import os
import signal
import sqlite3
import subprocess
import sys
import time
from pathlib import Path

import pytest

from spatiq.batch import catalogue_layout
from spatiq.batch.catalogue import FILE_NAME, open_catalogue
from spatiq.batch.catalogue_layout import TABLES, document
from spatiq.errors import InputError


def loss(measurement, reason, frames=1):
    return {"measurement": measurement, "reason": reason, "frames": frames}


@pytest.mark.nojit
def test_the_document_is_that_of_the_tables():
    """After a change: python -m spatiq.batch.catalogue_layout."""
    path = Path(catalogue_layout.__file__).with_name("catalogue.md")
    assert path.read_text(encoding="utf-8") == document()


@pytest.mark.nojit
def test_documented_columns_are_those_of_the_file(tmp_path):
    with open_catalogue(tmp_path, create=True):
        pass
    with sqlite3.connect(tmp_path / FILE_NAME) as plain:
        for name, table in TABLES.items():
            found = plain.execute(f"PRAGMA table_info({name})").fetchall()
            assert [(c[1], c[2]) for c in found] == [(f.name, f.kind) for f in table.fields]
            assert [c[1] for c in sorted(found, key=lambda c: c[5]) if c[5]] == list(table.key)
        # The document's own examples work.
        text = document()
        for example in text[text.index("    SELECT") : text.index("\n## ")].split(";"):
            if example.strip():
                plain.execute(example)


@pytest.mark.nojit
def test_entries_are_whole_or_absent(tmp_path):
    with open_catalogue(tmp_path, create=True) as catalogue:
        catalogue.put(losses=[loss("m", "in a gap")])
        with pytest.raises(ValueError, match="frames"):
            catalogue.put(losses=[loss("m", "not found"), {"measurement": "m", "reason": "odd"}])
        assert catalogue.rows("SELECT reason FROM losses") == [{"reason": "in a gap"}]
        catalogue.replace_measurement("m", {"losses": [loss("m", "not found", 3)]})
        assert catalogue.rows("SELECT reason, frames FROM losses") == [
            {"reason": "not found", "frames": 3}
        ]


@pytest.mark.nojit
@pytest.mark.parametrize(
    ("make", "says"),
    [
        (lambda p: None, "no such file"),
        (lambda p: p.write_bytes(b"cold night" * 500), "not a database"),
        (lambda p: sqlite3.connect(p).execute("CREATE TABLE x (y)"), "no such table: layout"),
    ],
)
def test_what_is_no_catalogue_is_refused(tmp_path, make, says):
    make(tmp_path / FILE_NAME)
    with pytest.raises(InputError, match=says):
        open_catalogue(tmp_path)


@pytest.mark.nojit
def test_a_newer_layout_is_refused(tmp_path):
    with open_catalogue(tmp_path, create=True):
        pass
    with sqlite3.connect(tmp_path / FILE_NAME) as plain:
        plain.execute("UPDATE layout SET version = 99")
    for create in (False, True):
        with pytest.raises(InputError, match="found 99; expected version 1"):
            open_catalogue(tmp_path, create=create)


WRITER = """
import itertools, sys
from pathlib import Path
from spatiq.batch.catalogue import open_catalogue
with open_catalogue(Path(sys.argv[1]), create=True) as catalogue:
    for k in itertools.count():
        rows = [{"measurement": f"m{k}", "reason": str(i), "frames": i} for i in range(50)]
        catalogue.put(losses=rows)
        print(k, flush=True)
"""


def test_a_killed_writer_leaves_whole_entries(tmp_path):
    """SIGKILL in the middle of writing; what had been acknowledged is there, all or nothing."""
    for delay in (0.0, 0.013, 0.031):
        command = [sys.executable, "-c", WRITER, str(tmp_path)]
        with subprocess.Popen(command, stdout=subprocess.PIPE, text=True) as writer:
            assert writer.stdout is not None
            seen = [int(writer.stdout.readline()) for _ in range(3)]
            time.sleep(delay)
            os.kill(writer.pid, signal.SIGKILL)
            seen += [int(line) for line in writer.stdout.read().split()]
        with open_catalogue(tmp_path) as catalogue:
            counts = catalogue.rows("SELECT measurement, COUNT(*) AS n FROM losses GROUP BY 1")
        assert {row["n"] for row in counts} == {50}
        assert {f"m{k}" for k in seen} <= {row["measurement"] for row in counts}
