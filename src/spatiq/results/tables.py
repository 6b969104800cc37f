"""Frame table and summary as CSV and JSON, streamed from a results file.

A missing figure is an empty cell in CSV and null in JSON. So is -1 in the integer columns that say
"-1" in their meaning. An infinite figure is `inf` in CSV; JSON has no such number: null there.
"""

from __future__ import annotations

import csv
import json
import math
from collections.abc import Iterator
from pathlib import Path
from typing import Any

from spatiq.metrics.frame_table import COLUMNS, Column
from spatiq.results.plain import leaves, plain
from spatiq.results.reader import Results
from spatiq.results.whole_files import whole_file


def _has_missing_code(column: Column) -> bool:
    return not column.dtype.startswith("f") and "-1" in column.meaning


def _rows(results: Results) -> Iterator[list[Any]]:
    """Rows of the frame table in the order of COLUMNS; missing figures are None."""
    for block in results.blocks():
        cells = []
        for column in COLUMNS:
            values = block[column.name].tolist()
            if column.dtype.startswith("f"):
                values = [None if math.isnan(v) else v for v in values]
            elif _has_missing_code(column):
                values = [None if v == -1 else v for v in values]
            cells.append(values)
        yield from map(list, zip(*cells, strict=True))


def write_frames_csv(results: Results, path: Path, *, overwrite: bool = False) -> None:
    """Write one line per frame under a line of column names.

    Raises:
        InputError: the file could not be written (see `check_target`).
    """
    with (
        whole_file(path, overwrite=overwrite) as partial,
        partial.open("w", encoding="utf-8", newline="") as file,
    ):
        table = csv.writer(file, lineterminator="\n")
        table.writerow([c.name for c in COLUMNS])
        table.writerows(_rows(results))


def write_frames_json(results: Results, path: Path, *, overwrite: bool = False) -> None:
    """Write an object with `columns` (unit and meaning of each), `frames` and `lost`, both arrays.

    Raises:
        InputError: the file could not be written (see `check_target`).
    """
    names = [c.name for c in COLUMNS]
    columns = {c.name: {"unit": c.unit, "meaning": c.meaning} for c in COLUMNS}
    with (
        whole_file(path, overwrite=overwrite) as partial,
        partial.open("w", encoding="utf-8") as file,
    ):
        file.write(f'{{\n"columns": {json.dumps(columns, ensure_ascii=False)},\n"frames": [')
        frames = (dict(zip(names, row, strict=True)) for row in _rows(results))
        _write_objects(file.write, frames)
        file.write('],\n"lost": [')
        _write_objects(file.write, (vars(frame) for frame in results.lost()))
        file.write("]\n}\n")


def _write_objects(write: Any, objects: Iterator[dict[str, Any]]) -> None:
    """One object a line, so that line tools can work on the file too."""
    for index, figures in enumerate(objects):
        write("\n" if index == 0 else ",\n")
        write(json.dumps(plain(figures), allow_nan=False, ensure_ascii=False))


def write_summary_csv(results: Results, path: Path, *, overwrite: bool = False) -> None:
    """Write the summary as lines `figure,value`: dotted names, one line each; lists are left out.

    Raises:
        InputError: the file could not be written (see `check_target`).
    """
    with (
        whole_file(path, overwrite=overwrite) as partial,
        partial.open("w", encoding="utf-8", newline="") as file,
    ):
        table = csv.writer(file, lineterminator="\n")
        table.writerow(["figure", "value"])
        table.writerows(leaves(results.summary))


def write_summary_json(results: Results, path: Path, *, overwrite: bool = False) -> None:
    """Write the summary as one JSON object.

    Raises:
        InputError: the file could not be written (see `check_target`).
    """
    with whole_file(path, overwrite=overwrite) as partial:
        text = json.dumps(results.summary, indent=2, allow_nan=False, ensure_ascii=False)
        partial.write_text(text + "\n", encoding="utf-8")
