"""The Python that has spatiq: this one, else the repository's own environment.

Standard library only: this runs before anything is installed, and before numpy is loaded.
"""

from __future__ import annotations

import importlib.util
import os
import sys
from pathlib import Path

from _setup import prepare

_THREADS = ("OMP", "OPENBLAS", "MKL", "NUMEXPR", "NUMBA")


def enter_environment() -> None:
    """Go on in an environment that has spatiq: this one, or `.venv`, made when it is missing."""
    if importlib.util.find_spec("spatiq") is None:
        os.execv(python := prepare(), [str(python), *sys.argv])


def spatiq_program() -> str:
    """The installed program, as a user would run it."""
    return str(Path(sys.executable).with_name("spatiq.exe" if os.name == "nt" else "spatiq"))


def one_core() -> None:
    """Confine this process to one core and one thread; to be called before numpy is loaded."""
    for name in _THREADS:
        os.environ[f"{name}_NUM_THREADS"] = "1"
    if hasattr(os, "sched_setaffinity"):
        os.sched_setaffinity(0, {max(os.sched_getaffinity(0))})


def spatiq_command() -> list[str]:
    """How to start the program; without an installed one, through this Python."""
    installed = spatiq_program()
    if Path(installed).is_file():
        return [installed]
    return [sys.executable, "-c", "from spatiq.cli.main import run; run()"]


def one_thread() -> None:
    """One thread for the arithmetic of every process started from here."""
    for name in _THREADS:
        os.environ[f"{name}_NUM_THREADS"] = "1"
