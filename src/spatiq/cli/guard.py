"""How every command ends: one line for what went wrong, and the exit code that goes with it.

0 done; 1 done, and the verdict is "not accepted"; 2 bad input or usage; 3 done in part.
"""

from __future__ import annotations

import functools
import os
import sys
from collections.abc import Callable
from typing import NoReturn, ParamSpec

import typer

from spatiq.errors import SpatiqError

P = ParamSpec("P")

BAD_INPUT = 2
INTERRUPTED = 130  # 128 + SIGINT, as shells count it


def guarded(command: Callable[P, int | None]) -> Callable[P, None]:
    """Wrap a command: what it returns is the exit code, what it raises becomes one line."""

    @functools.wraps(command)
    def run(*args: P.args, **kwargs: P.kwargs) -> None:
        try:
            code = command(*args, **kwargs)
            sys.stdout.flush()
        except SpatiqError as error:
            _fail(str(error))
        except BrokenPipeError:
            # Whoever read our output has stopped, which is no fault. Python would complain when
            # it flushes at exit: give it somewhere to flush to.
            os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
            raise typer.Exit(0) from None
        except KeyboardInterrupt:
            typer.echo("spatiq: interrupted; unfinished files are removed", err=True)
            raise typer.Exit(INTERRUPTED) from None
        except OSError as error:
            _fail(os_error_text(error))
        if code:
            raise typer.Exit(code)

    return run


def os_error_text(error: OSError) -> str:
    """An operating-system error in one line: file, then reason."""
    reason = error.strerror or str(error) or type(error).__name__
    place = f"{error.filename}: " if error.filename is not None else ""
    return " ".join(f"{place}{reason}".split())


def _fail(text: str) -> NoReturn:
    typer.echo(f"spatiq: {text}", err=True)
    raise typer.Exit(BAD_INPUT)
