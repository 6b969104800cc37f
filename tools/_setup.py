"""The repository's own environment, `.venv`: made once, brought up to date when it must be.

Standard library only: this runs before anything is installed.
"""

from __future__ import annotations

import hashlib
import os
import subprocess
import sys
import time
import venv
from pathlib import Path

REPOSITORY = Path(__file__).resolve().parent.parent
_LEAST_PYTHON = (3, 11)


def say(text: str) -> None:
    """A line on what is being done, at once even when the output goes to a file."""
    print(text, flush=True)


def stamp(repository: Path) -> str:
    """Changes whenever the environment has to be made anew."""
    digest = hashlib.sha256((repository / "pyproject.toml").read_bytes())
    # An editable installation knows its folder: a copied repository needs its own.
    for fact in (sys.version, str(repository)):
        digest.update(fact.encode())
    return digest.hexdigest()


def program(repository: Path, name: str) -> Path:
    """A program of the environment."""
    folder = "Scripts" if os.name == "nt" else "bin"
    return repository / ".venv" / folder / (f"{name}.exe" if os.name == "nt" else name)


def prepare(repository: Path = REPOSITORY) -> Path:
    """Make `.venv` and install the project with its test and check tools; return its Python.

    The second time this takes no longer than reading pyproject.toml.
    """
    if sys.version_info < _LEAST_PYTHON:
        found = ".".join(str(n) for n in sys.version_info[:3])
        sys.exit(f"Python {found} is too old; spatiq needs 3.11 or newer.")
    home = repository / ".venv"
    python = program(repository, "python")
    mark = home / "spatiq-stamp"
    wanted = stamp(repository)
    if python.exists() and mark.is_file() and mark.read_text() == wanted:
        return python
    started = time.monotonic()
    say(f"Making the environment {home} (only once; it takes a minute or two) ...")
    mark.unlink(missing_ok=True)
    venv.create(home, with_pip=True, clear=True)
    say("Installing spatiq, its libraries and its test and check tools into it ...")
    command = [python, "-m", "pip", "install", "-qq", "--disable-pip-version-check"]
    done = subprocess.run([*command, "-e", ".[test,check]"], cwd=repository, check=False)
    if done.returncode:
        sys.exit("The installation failed; pip says why above. Nothing outside .venv has changed.")
    mark.write_text(wanted)
    say(f"Ready after {time.monotonic() - started:.0f} s.\n")
    return python
