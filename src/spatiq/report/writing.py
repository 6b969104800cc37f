"""From what was measured to pages on disk."""

from __future__ import annotations

from pathlib import Path

from spatiq.errors import InputError
from spatiq.report.gathered import gather
from spatiq.report.page import write_page
from spatiq.report.printed import write_printed
from spatiq.report.recording_sheet import recording_plots, recording_sheet
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


def write_figures(
    source: Path, out: Path | None, form: str, width_mm: float, only: list[str], *, overwrite: bool
) -> list[Path]:
    """Write plots of a results file for print, into a folder that is made if need be.

    Raises:
        InputError: the source is none, `only` names no plot of it, or a file cannot be written.
    """
    with open_results(source) as results:
        plots = [p for p in recording_plots(gather(results)) if p.panels]
    keys = [p.key for p in plots]
    for name in only:
        if name not in keys:
            raise InputError("--only", "", name, f"one of {', '.join(keys) or 'none: no frame'}")
    chosen = [p for p in plots if not only or p.key in only]
    folder = out or source.with_name(f"{bare_name(source)}-figures")
    folder.mkdir(exist_ok=True)
    return write_printed(chosen, folder, form, width_mm, overwrite=overwrite)
