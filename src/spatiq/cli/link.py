"""`spatiq link`: what a link description says, and how to write one."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from spatiq.cli.guard import guarded

link_app = typer.Typer(no_args_is_help=True, help="Explain link descriptions and their format.")


def explain_command(
    link: Annotated[Path, typer.Argument(help="Link description (*.link.toml).")],
) -> None:
    """Show what a link description puts on the air: frame layout, code table, rates.

    Example: spatiq link explain prototype.link.toml
    """
    from spatiq.link.loading import load_link

    typer.echo(load_link(link).explain())


def schema_command() -> None:
    """Print the JSON schema of link descriptions, for editors and for programs that write them.

    Example: spatiq link schema > link.schema.json
    """
    import json

    from spatiq.link.schema import json_schema

    typer.echo(json.dumps(json_schema(), indent=2))


def manual_command() -> None:
    """Print the format document: all that a transmitter must know, to the bit.

    Example: spatiq link manual > link-format.md
    """
    from importlib.resources import files

    typer.echo((files("spatiq.link") / "manual.md").read_text(encoding="utf-8"), nl=False)


link_app.command("explain")(guarded(explain_command))
link_app.command("schema")(guarded(schema_command))
link_app.command("manual")(guarded(manual_command))
