"""`spatiq figures`: a recording's plots for papers, with the data that they draw."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer


def figures_command(
    results: Annotated[Path, typer.Argument(help="Results file (*.spatiq.h5).")],
    out: Annotated[
        Path | None, typer.Option(help="Folder.", show_default="beside it, NAME-figures")
    ] = None,
    form: Annotated[str, typer.Option("--format", metavar="svg|pdf|png")] = "svg",
    width: Annotated[float, typer.Option(help="Width in mm: 88 for a column.")] = 88.0,
    only: Annotated[
        list[str] | None, typer.Option(metavar="NAME", help="Only this one. Repeatable.")
    ] = None,
    overwrite: Annotated[bool, typer.Option("--overwrite", help="Replace files there.")] = False,
) -> None:
    """Write a recording's plots as SVG, PDF or PNG, each with its data as CSV.

    Example: spatiq figures run-07.spatiq.h5 --format pdf --only confusion
    """
    from spatiq.cli.extras import need

    need("report", "matplotlib")
    from spatiq.report.writing import write_figures

    for path in write_figures(results, out, form, width, only or [], overwrite=overwrite):
        typer.echo(f"written: {path}")
