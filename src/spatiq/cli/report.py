"""`spatiq report`: a page that answers the engineer's questions in the order they are asked."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

_MOST_TOLD = 5


def report_command(
    source: Annotated[
        Path, typer.Argument(help="Results file, or results folder of `spatiq batch`.")
    ],
    out: Annotated[
        Path | None,
        typer.Option(
            help="The page.", show_default="NAME.html beside it; night.html in a night's folder"
        ),
    ] = None,
    inline: Annotated[
        bool, typer.Option("--inline", help="Put the drawing script (5 MB) into the page itself.")
    ] = False,
    overwrite: Annotated[bool, typer.Option("--overwrite", help="Replace pages there.")] = False,
) -> None:
    """Write a recording's or a night's figures as HTML pages that work offline.

    Example: spatiq report run-07.spatiq.h5
    """
    from spatiq.cli.extras import need

    need("report", "jinja2", "plotly")
    from spatiq.report.writing import write_report

    written = write_report(source, out, inline=inline, overwrite=overwrite)
    for path in written[:_MOST_TOLD]:
        typer.echo(f"written: {path}")
    if len(written) > _MOST_TOLD:
        typer.echo(f"and {len(written) - _MOST_TOLD} more, beside it")
