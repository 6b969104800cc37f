"""`spatiq catalogue`: what a batch has found out, asked for by name."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from spatiq.cli.guard import guarded

catalogue_app = typer.Typer(
    no_args_is_help=True,
    help="Query the catalogue of a batch: an SQLite file that may also be queried by itself.",
)

_Place = Annotated[Path, typer.Argument(help="Results folder of `spatiq batch`, or its catalogue.")]
_Json = Annotated[bool, typer.Option("--json", help="Print as JSON.")]


def night_command(place: _Place, as_json: _Json = False) -> None:
    """The night at a glance: pooled figures of each link, what stands out, what failed.

    Example: spatiq catalogue night /data/night-results
    """
    from spatiq.batch.catalogue import open_catalogue
    from spatiq.batch.night import night_figures
    from spatiq.cli.catalogue_text import print_json
    from spatiq.cli.night_text import print_night

    with open_catalogue(place) as catalogue:
        figures = night_figures(catalogue)
    print_json(figures) if as_json else print_night(figures)


def list_command(
    place: _Place,
    sort: Annotated[str, typer.Option(help="time, name, ber, lost or outage.")] = "time",
    as_json: _Json = False,
) -> None:
    """A line for each measured recording.

    Example: spatiq catalogue list /data/night-results --sort ber
    """
    from spatiq.batch.catalogue import open_catalogue
    from spatiq.batch.queries import listed
    from spatiq.cli.catalogue_text import print_json, print_list

    with open_catalogue(place) as catalogue:
        rows = listed(catalogue, sort)
    print_json(rows) if as_json else print_list(rows)


def show_one_command(
    place: _Place,
    recording: Annotated[str, typer.Argument(help="Base name or path of a recording.")],
    as_json: _Json = False,
) -> None:
    """All that is known of one recording, and how it went over time.

    Example: spatiq catalogue show /data/night-results run-07
    """
    from spatiq.batch.catalogue import open_catalogue
    from spatiq.batch.queries import one_recording
    from spatiq.cli.catalogue_text import print_json, print_one

    with open_catalogue(place) as catalogue:
        known = one_recording(catalogue, recording)
    print_json(known) if as_json else print_one(known)


def failed_command(place: _Place, as_json: _Json = False) -> None:
    """Recordings that are not measured, each with its reason.

    Example: spatiq catalogue failed /data/night-results
    """
    from spatiq.batch.catalogue import open_catalogue
    from spatiq.batch.queries import not_measured
    from spatiq.cli.catalogue_text import print_failed, print_json

    with open_catalogue(place) as catalogue:
        rows = not_measured(catalogue)
    print_json(rows) if as_json else print_failed(rows)


def export_command(
    place: _Place,
    to: Annotated[Path, typer.Argument(help="Folder for CSV files, or a name ending in .json.")],
    overwrite: Annotated[bool, typer.Option("--overwrite", help="Replace files there.")] = False,
) -> None:
    """Every table as CSV in a folder, or everything as one JSON file.

    Example: spatiq catalogue export /data/night-results tables
    """
    from spatiq.batch.catalogue import open_catalogue
    from spatiq.batch.queries import export_csv, export_json

    with open_catalogue(place) as catalogue:
        if to.suffix == ".json":
            export_json(catalogue, to, overwrite=overwrite)
            written = [to]
        else:
            to.mkdir(parents=True, exist_ok=True)
            written = export_csv(catalogue, to, overwrite=overwrite)
    typer.echo("\n".join(f"written: {path}" for path in written))


def manual_command() -> None:
    """Print how a batch works, the rule file, and the catalogue's tables.

    Example: spatiq catalogue manual
    """
    from importlib.resources import files

    texts = files("spatiq.batch")
    for name in ("manual.md", "catalogue.md"):
        typer.echo(texts.joinpath(name).read_text(encoding="utf-8"))


catalogue_app.command("night")(guarded(night_command))
catalogue_app.command("list")(guarded(list_command))
catalogue_app.command("show")(guarded(show_one_command))
catalogue_app.command("failed")(guarded(failed_command))
catalogue_app.command("export")(guarded(export_command))
catalogue_app.command("manual")(guarded(manual_command))
