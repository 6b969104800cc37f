"""The program `spatiq`: its commands, registered. Each loads what it needs only when it is run."""

from __future__ import annotations

import signal
from types import FrameType
from typing import Annotated, NoReturn

import typer

from spatiq import __version__
from spatiq.cli.batch import batch_command
from spatiq.cli.catalogue import catalogue_app
from spatiq.cli.figures import figures_command
from spatiq.cli.guard import guarded
from spatiq.cli.link import link_app
from spatiq.cli.measure import measure_command
from spatiq.cli.report import report_command
from spatiq.cli.show import show_command
from spatiq.cli.simulate import simulate_command
from spatiq.cli.verify import verify_command
from spatiq.cli.waveform import waveform_command

app = typer.Typer(
    name="spatiq",
    no_args_is_help=True,
    pretty_exceptions_show_locals=False,
    context_settings={"help_option_names": ["-h", "--help"]},
)


def _print_version(wanted: bool) -> None:
    if wanted:
        typer.echo(f"spatiq {__version__}")
        raise typer.Exit


@app.callback()
def _program(
    version: Annotated[
        bool,
        typer.Option(
            "--version", is_eager=True, callback=_print_version, help="Show the version and leave."
        ),
    ] = False,
) -> None:
    """Measure spatial-modulation radio links from captured IQ recordings (SigMF).

    Example: spatiq measure run-07.sigmf-meta prototype.link.toml
    """


app.command("measure")(guarded(measure_command))
app.command("show")(guarded(show_command))
app.command("report")(guarded(report_command))
app.command("figures")(guarded(figures_command))
app.command("verify")(guarded(verify_command))
app.command("batch")(guarded(batch_command))
app.add_typer(catalogue_app, name="catalogue")
app.add_typer(link_app, name="link")
app.command("waveform")(guarded(waveform_command))
app.command("simulate")(guarded(simulate_command))


def _terminated(number: int, _frame: FrameType | None) -> NoReturn:
    """A batch system asks us to leave: unwind, so that unfinished files are removed."""
    raise SystemExit(128 + number)


def run() -> None:
    """Entry point of the installed program."""
    signal.signal(signal.SIGTERM, _terminated)
    app()
