"""Results on standard output."""

from __future__ import annotations

import sys

from rich.console import Console

from spatiq.results.plain import json_text
from spatiq.results.reader import Results
from spatiq.results.text import show_results

# Narrower screens wrap lines; a figure is never cut short to fit one.
_LEAST_WIDTH = 140


def print_results(results: Results, *, rows: int, as_json: bool) -> None:
    """Print the tables, or the summary as JSON and nothing else."""
    if as_json:
        sys.stdout.write(json_text(results.summary) + "\n")
        return
    console = Console(highlight=False, markup=False, emoji=False)
    console.width = max(console.width, _LEAST_WIDTH)
    show_results(results, console, rows=rows)
