"""From what was measured to pages on disk."""

from __future__ import annotations

from pathlib import Path
from urllib.parse import quote

from spatiq.batch.catalogue import open_catalogue
from spatiq.errors import InputError
from spatiq.report.gathered import gather
from spatiq.report.night_sheet import night_sheet
from spatiq.report.page import write_page
from spatiq.report.printed import write_printed
from spatiq.report.recording_sheet import recording_plots, recording_sheet
from spatiq.results.reader import open_results
from spatiq.results.whole_files import check_target

_ENDINGS = (".h5", ".spatiq")


def bare_name(path: Path) -> str:
    """A results file's name without its endings."""
    name = path.name
    for ending in _ENDINGS:
        name = name.removesuffix(ending)
    return name


def write_night(source: Path, out: Path | None, *, inline: bool, overwrite: bool) -> list[Path]:
    """Write a night's page, and one for each recording whose results file is there.

    Recordings' pages go into the folder `pages` beside the night's, under their measurement's
    digest: names of recordings are not to be trusted as file names.

    Raises:
        InputError: no catalogue, or a page cannot be written.
    """
    with open_catalogue(source) as catalogue:
        home = catalogue.path.parent
        target = out or home / "night.html"
        check_target(target, overwrite=overwrite)
        folder = target.parent / "pages"
        folder.mkdir(exist_ok=True)
        back = f"../{quote(target.name)}"
        written: list[Path] = []
        pages: dict[str, str] = {}
        for row in catalogue.rows("SELECT DISTINCT measurement, results_file FROM night"):
            path = home / row["results_file"]
            if not path.is_file():
                continue
            page = folder / f"{row['measurement'][:24]}.html"
            with open_results(path) as results:
                sheet = recording_sheet(results, back=back)
            written += write_page(sheet, page, inline=inline, overwrite=overwrite, up="../")
            pages[row["measurement"]] = f"pages/{page.name}"
        sheet = night_sheet(catalogue, pages)
        return write_page(sheet, target, inline=inline, overwrite=overwrite) + written


def write_report(source: Path, out: Path | None, *, inline: bool, overwrite: bool) -> list[Path]:
    """Write the page of a results file, or those of a night.

    Returns:
        the files written.

    Raises:
        InputError: the source is none, or a page cannot be written.
    """
    if source.is_dir() or source.suffix == ".sqlite":
        return write_night(source, out, inline=inline, overwrite=overwrite)
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
