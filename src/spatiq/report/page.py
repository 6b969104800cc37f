"""A sheet as one HTML page that works from a file, offline, without any request to a network.

Everything from files is escaped: by Jinja2 in the text, and in the page's data by writing `<`, `>`
and `&` as JSON escapes. The page's own rules (Content-Security-Policy) refuse requests besides.
"""

from __future__ import annotations

import json
from functools import cache
from importlib.resources import files
from pathlib import Path

import plotly
from jinja2 import Environment, PackageLoader, StrictUndefined
from markupsafe import Markup

from spatiq.report.plots import drawing
from spatiq.report.recording_sheet import Sheet
from spatiq.results.plain import plain
from spatiq.results.whole_files import check_target, whole_file

_CAUTION = (
    "Figures are engineering measurements, not a certificate of conformity. Whoever transmits"
    " keeps to local rules, licences and exposure limits."
)


def library_name() -> str:
    """File name of the drawing library's script beside the pages."""
    return f"plotly-{plotly.__version__}.min.js"


@cache
def library_text() -> str:
    """The drawing library's script, as its own package ships it."""
    return (files(plotly) / "package_data" / "plotly.min.js").read_text(encoding="utf-8")


def script_json(value: object) -> Markup:
    """Plain figures as JSON that may stand inside a script element."""
    text = json.dumps(plain(value), allow_nan=False, separators=(",", ":"))
    for mark in "<>&":
        text = text.replace(mark, f"\\u{ord(mark):04x}")
    return Markup(text)  # ASCII without markup: see above


@cache
def _environment() -> Environment:
    made = Environment(
        loader=PackageLoader("spatiq.report"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    made.filters["numeric"] = _is_numeric
    return made


def _is_numeric(cell: object) -> bool:
    """Whether a table's cell is set right: a number, or a text that begins with one."""
    return isinstance(cell, int | float) or str(cell).lstrip("<> -")[:1].isdigit() or cell == "-"


def _own(name: str) -> Markup:
    """A file of this package's own, put into the page as it is."""
    return Markup((files("spatiq.report") / "templates" / name).read_text(encoding="utf-8"))


def page(sheet: Sheet, *, inline: bool, up: str = "") -> str:
    """The page's text.

    Args:
        sheet: what it shows.
        inline: put the drawing library's script (5 MB) into the page instead of beside it.
        up: where the script lies, seen from the page: "" or "../".
    """
    data = {"plots": [drawing(p) for p in sheet.plots if p.panels], "frames": sheet.frames}
    return (
        _environment()
        .get_template("sheet.html")
        .render(
            sheet=sheet,
            data=script_json(data),
            style=_own("sheet.css"),
            script=_own("sheet.js"),
            library=Markup(library_text().replace("</script", "<\\/script")) if inline else "",
            library_name=up + library_name(),
            caution=_CAUTION,
        )
    )


def write_page(
    sheet: Sheet, path: Path, *, inline: bool, overwrite: bool = False, up: str = ""
) -> list[Path]:
    """Write a page, and the library beside it where it is not inlined and not there yet.

    Returns:
        the files written.

    Raises:
        InputError: see `whole_file`.
    """
    check_target(path, overwrite=overwrite)
    written = []
    beside = path.parent / up / library_name()
    if not inline and not beside.exists():
        with whole_file(beside) as partial:
            partial.write_text(library_text(), encoding="utf-8")
        written.append(beside)
    with whole_file(path, overwrite=overwrite) as partial:
        partial.write_text(page(sheet, inline=inline, up=up), encoding="utf-8")
    return [path, *written]
