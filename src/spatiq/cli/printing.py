"""Results on standard output."""

from __future__ import annotations

import sys

from rich.console import Console

from spatiq.results.plain import json_text
from spatiq.results.reader import Results
from spatiq.results.text import show_results

# Narrower screens wrap lines; a figure is never cut short to fit one.
_LEAST_WIDTH = 140


class _PipeConsole(Console):
    """A console that leaves a closed pipe to the command's guard; its own way is exit code 1."""

    def on_broken_pipe(self) -> None:
        """Called while the exception is handled: pass it on."""
        raise BrokenPipeError


def wide_console() -> Console:
    """A console on standard output that is never too narrow for a table."""
    console = _PipeConsole(highlight=False, markup=False, emoji=False)
    console.width = max(console.width, _LEAST_WIDTH)
    return console


def print_results(results: Results, *, rows: int, as_json: bool) -> None:
    """Print the tables, or the summary as JSON and nothing else."""
    if as_json:
        sys.stdout.write(json_text(results.summary) + "\n")
        return
    show_results(results, wide_console(), rows=rows)
