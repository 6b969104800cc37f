"""`spatiq show`: the tables of a results file again."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer


def show_command(
    results: Annotated[Path, typer.Argument(help="Results file (*.spatiq.h5).")],
    rows: Annotated[int, typer.Option(min=0, help="Frames listed; 0 for none.")] = 20,
    as_json: Annotated[
        bool, typer.Option("--json", help="Print the summary as JSON instead.")
    ] = False,
) -> None:
    """Show what a results file holds: summary, antenna confusion, first frames.

    Example: spatiq show run-07.spatiq.h5 --rows 100
    """
    from spatiq.cli.printing import print_results
    from spatiq.results.reader import open_results

    with open_results(results) as opened:
        print_results(opened, rows=rows, as_json=as_json)
