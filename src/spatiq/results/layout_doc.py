"""The tables of layout.md, made from the definitions that the writer uses.

After changing a definition: `python -m spatiq.results.layout_doc` brings layout.md up to date; a
test checks that it is.
"""

from __future__ import annotations

from importlib.resources import files
from pathlib import Path

from spatiq.metrics.frame_table import COLUMNS, Mark
from spatiq.metrics.path_figures import ANTENNA, RECEIVE
from spatiq.results.hdf5 import LOST, PER_PATH, PER_RECEIVE
from spatiq.results.provenance import FIELDS


def _table(headings: list[str], rows: list[list[str]]) -> str:
    lines = [headings, ["---"] * len(headings), *rows]
    return "\n".join(
        "| " + " | ".join(c.replace("|", r"\|") for c in line) + " |" for line in lines
    )


def tables() -> dict[str, str]:
    """Name of each generated part -> its Markdown table."""
    columns = [[f"`{c.name}`", c.dtype, c.unit, c.meaning] for c in COLUMNS]
    marks = [[str(int(m)), (m.name or "").lower().replace("_", " ")] for m in Mark if m]
    figures = RECEIVE | ANTENNA
    lost = [[f"`{name}`", *entry] for name, entry in LOST.items()]
    paths = [
        [f"`{name}`", "f8", "(F, Nr)" if figure in RECEIVE else "(F, Nt)", *figures[figure]]
        for name, figure in PER_PATH.items()
    ]
    front_end = [
        [f"`{name.removeprefix('receive/')}`", "f8", "(F, Nr)", unit, meaning]
        for name, (_, unit, meaning) in PER_RECEIVE.items()
    ]
    heads = ["dataset", "type", "unit", "meaning"]
    return {
        "columns": _table(heads, columns),
        "marks": _table(["bit", "set when"], marks),
        "lost": _table(heads, lost),
        "paths": _table(["dataset", "type", "shape", "unit", "meaning"], paths),
        "front end": _table(["dataset", "type", "shape", "unit", "meaning"], front_end),
        "provenance": _table(["dataset", "text"], [[f"`{k}`", v] for k, v in FIELDS.items()]),
    }


def filled(document: str) -> str:
    """The document with its generated parts replaced by the tables as they should be."""
    for name, table in tables().items():
        start, end = f"<!-- {name}: generated -->\n", "<!-- end -->"
        before, found, rest = document.partition(start)
        _, ended, after = rest.partition(end)
        if not found or not ended:
            raise ValueError(f"layout.md lacks the generated part {name!r}")
        document = f"{before}{start}{table}\n{end}{after}"
    return document


def layout_text() -> str:
    """The documented layout as shipped."""
    return (files("spatiq.results") / "layout.md").read_text(encoding="utf-8")


if __name__ == "__main__":
    place = Path(__file__).with_name("layout.md")
    place.write_text(filled(place.read_text(encoding="utf-8")), encoding="utf-8")
