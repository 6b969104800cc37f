"""From what was measured to pages on disk."""

from __future__ import annotations

from pathlib import Path

from spatiq.report.page import write_page
from spatiq.report.recording_sheet import recording_sheet
from spatiq.results.reader import open_results

_ENDINGS = (".h5", ".spatiq")


def bare_name(path: Path) -> str:
    """A results file's name without its endings."""
    name = path.name
    for ending in _ENDINGS:
        name = name.removesuffix(ending)
    return name


def write_report(source: Path, out: Path | None, *, inline: bool, overwrite: bool) -> list[Path]:
    """Write the page of a results file.

    Returns:
        the files written.

    Raises:
        InputError: the source is none, or a page cannot be written.
    """
    with open_results(source) as results:
        target = out or source.with_name(f"{bare_name(source)}.html")
        return write_page(recording_sheet(results), target, inline=inline, overwrite=overwrite)
