"""Are two results folders the same, but for when and how the work was done?"""

from __future__ import annotations

from pathlib import Path
from typing import Any

import h5py
import numpy as np

from spatiq.batch.catalogue import open_catalogue
from spatiq.batch.catalogue_layout import HOW_AND_WHEN, TABLES
from spatiq.batch.work import RESULTS_FOLDER


def results_contents(path: Path) -> dict[str, Any]:
    """Everything in a results file but the time of measuring: name -> attributes and bytes."""
    found: dict[str, Any] = {}

    def note(name: str, thing: h5py.Dataset | h5py.Group) -> None:
        if name == "provenance/measured_at":
            return
        attributes = {key: np.asarray(value).tolist() for key, value in thing.attrs.items()}
        value = None
        if isinstance(thing, h5py.Dataset):
            raw = np.asarray(thing[()])
            value = raw.shape, raw.tolist() if raw.dtype == object else raw.tobytes()
        found[name] = repr(attributes), value

    with h5py.File(path, "r") as file:
        file.visititems(note)
    return found


def catalogue_contents(folder: Path) -> dict[str, list[dict[str, Any]]]:
    """Rows of all tables in the order of their keys, without the columns of HOW_AND_WHEN."""
    tables = {}
    with open_catalogue(folder) as catalogue:
        for name, table in TABLES.items():
            if name != "runs":
                rows = catalogue.rows(f"SELECT * FROM {name} ORDER BY {', '.join(table.key)}")
                tables[name] = [
                    {k: v for k, v in row.items() if k not in HOW_AND_WHEN} for row in rows
                ]
    return tables


def differences(one: Path, other: Path) -> list[str]:
    """What differs between two results folders, in words."""
    found = []
    first, second = catalogue_contents(one), catalogue_contents(other)
    for name in first:
        if first[name] != second[name]:
            rows = [r for r in first[name] if r not in second[name]]
            rows += [r for r in second[name] if r not in first[name]]
            found.append(f"catalogue, {name}: {len(rows)} rows, such as {rows[:1]}")
    files = [sorted(p.name for p in (f / RESULTS_FOLDER).iterdir()) for f in (one, other)]
    if files[0] != files[1]:
        found.append(f"files: {sorted(set(files[0]) ^ set(files[1]))[:5]}")
    for name in sorted(set(files[0]) & set(files[1])):
        here = results_contents(one / RESULTS_FOLDER / name)
        there = results_contents(other / RESULTS_FOLDER / name)
        odd = [k for k in here.keys() | there.keys() if here.get(k) != there.get(k)]
        if odd:
            found.append(f"{name}: {', '.join(sorted(odd)[:5])}")
    return found
