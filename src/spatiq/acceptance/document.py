"""A verification as plain values, and in files: JSON and HDF5."""

from __future__ import annotations

from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

import h5py

from spatiq import __version__
from spatiq.acceptance.decision import Judgement
from spatiq.acceptance.figure_kinds import Figure
from spatiq.acceptance.limits import Limits
from spatiq.acceptance.verification import Verification
from spatiq.results.plain import json_text, plain
from spatiq.results.whole_files import whole_file

CAUTION = (
    "Engineering measurements, not a certificate of conformity. Radiate only with a licence or in "
    "a shielded set-up, as local rules say; cabled, attenuate; keep local exposure limits."
)
RULE = (
    "accepted: the whole interval lies within the bounds; not accepted: it lies outside; "
    "undecided: it holds a bound"
)


@dataclass(frozen=True)
class Subject:
    """What was verified, for the reader: names of recording, link and limits, and the set-up."""

    recording: str
    link: str
    limits: str
    setup: str


def document(verification: Verification, limits: Limits, subject: Subject) -> dict[str, Any]:
    """Everything, as plain JSON values; what is unbounded or was not measured is null."""
    values = {
        "format": 1,
        "program": f"spatiq {__version__}",
        "recording": subject.recording,
        "link": subject.link,
        "limits": limits.name or subject.limits,
        "setup": subject.setup,
        "verdict": verification.verdict.value,
        "rule": RULE,
        "confidence": limits.confidence,
        "frames": verification.frames,
        "lost": verification.lost,
        "causes": [asdict(cause) for cause in verification.causes],
        "judgements": [_judgement(j) for j in verification.judgements],
        "figures": [_figure(f) for f in verification.figures],
        "cannot_tell": verification.cannot_tell,
        "caution": CAUTION,
    }
    made: dict[str, Any] = plain(values)
    return made


def _figure(figure: Figure) -> dict[str, Any]:
    return {
        "figure": figure.kind.name,
        "subject": figure.subject,
        "unit": figure.kind.unit,
        "value": figure.value,
        "low": figure.low,
        "high": figure.high,
        "frames": figure.frames,
        "note": figure.note,
    }


def _judgement(judgement: Judgement) -> dict[str, Any]:
    figure, limit = judgement.figure, judgement.limit
    return {
        "figure": limit.figure,
        "subject": None if figure is None else figure.subject,
        "lower": limit.lower,
        "upper": limit.upper,
        "value": None if figure is None else figure.value,
        "decision": judgement.decision.value,
        "frames_needed": judgement.frames_needed,
        "source": limit.source,
    }


def write_json(path: Path, made: dict[str, Any], *, overwrite: bool = False) -> None:
    """The document as a JSON file, whole or not at all."""
    with whole_file(path, overwrite=overwrite) as partial:
        partial.write_text(json_text(made) + "\n", encoding="utf-8")


def write_hdf5(path: Path, made: dict[str, Any], *, overwrite: bool = False) -> None:
    """The document as an HDF5 file.

    Tables `figures`, `judgements` and `causes` are groups with a dataset for each column (NaN:
    missing; text in UTF-8); all else is an attribute of the root, lists and counts as JSON.
    """
    with (
        whole_file(path, overwrite=overwrite) as partial,
        h5py.File(partial, "w") as file,
    ):
        for key, value in made.items():
            if key in ("figures", "judgements", "causes"):
                _table(file.create_group(key), value)
            else:
                simple = isinstance(value, str | int | float)
                file.attrs[key] = value if simple else json_text(value, indent=None)


def _table(group: h5py.Group, rows: list[dict[str, Any]]) -> None:
    numbers = ("value", "low", "high", "lower", "upper", "frames", "frames_needed", "chance")
    for name in rows[0] if rows else ():
        column = [row[name] for row in rows]
        if name in numbers:
            data = [float("nan") if v is None else float(v) for v in column]
            group.create_dataset(name, data=data, dtype="f8")
        else:
            texts = ["" if v is None else str(v) for v in column]
            group.create_dataset(name, data=texts, dtype=h5py.string_dtype("utf-8"))
