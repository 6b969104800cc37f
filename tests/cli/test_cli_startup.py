"""Help and completion must answer at once: nothing heavy is loaded for them."""

import os
import subprocess
import sys
import time

import pytest

HEAVY = ("numpy", "numba", "scipy", "h5py", "sigmf", "llvmlite")

# The same number of commands, none of them ours: what typer itself costs.
EMPTY = """
import typer
app = typer.Typer()
for name in ("measure", "show", "link", "waveform", "simulate"):
    app.command(name)(lambda x=1: None)
app()
"""
OURS = "from spatiq.cli.main import run; run()"


def loaded_by(*arguments):
    """Names of all modules that a run of the program imports, and its exit code."""
    command = [sys.executable, "-X", "importtime", "-c", OURS, *arguments]
    done = subprocess.run(command, capture_output=True, text=True, check=False)
    lines = [ln for ln in done.stderr.splitlines() if ln.startswith("import time:")]
    return {ln.rsplit("|", 1)[1].strip().partition(".")[0] for ln in lines}, done.returncode


@pytest.mark.parametrize(
    "arguments",
    [
        ["--help"],
        ["--version"],
        ["measure", "--help"],
        ["show", "--help"],
        ["link", "--help"],
        ["link", "schema", "--help"],
        ["waveform", "--help"],
        ["simulate", "--help"],
    ],
)
def test_help_loads_nothing_heavy(arguments):
    modules, code = loaded_by(*arguments)
    assert code == 0
    assert "typer" in modules  # the listing works at all
    assert modules & set(HEAVY) == set()


def test_the_first_help_does_not_load_pydantic_either():
    # With a command's own help, some versions of typer load it for themselves.
    modules, _ = loaded_by("--help")
    assert "pydantic" not in modules


def test_a_command_that_needs_numpy_is_seen_to_load_it():
    modules, code = loaded_by("show", "no-such-file.h5")
    assert code == 2
    assert {"numpy", "h5py"} <= modules


def best_of(code, runs=9):
    """Shortest wall-clock of `python -c code --help`: the least disturbed by other work."""
    times = []
    for _ in range(runs):
        started = time.perf_counter()
        subprocess.run([sys.executable, "-c", code, "--help"], check=True, capture_output=True)
        times.append(time.perf_counter() - started)
    return min(times)


def test_help_costs_little_more_than_an_empty_program():
    # Loading numpy alone would double the time. The margin is for a machine that is busy.
    assert best_of(OURS) < 1.5 * best_of(EMPTY)


def test_completion_is_answered_by_the_program_itself():
    environment = os.environ | {
        "_SPATIQ_COMPLETE": "complete_bash",
        "COMP_WORDS": "spatiq me",
        "COMP_CWORD": "1",
    }
    command = [sys.executable, "-c", f"import sys; sys.argv[0] = 'spatiq'; {OURS}"]
    done = subprocess.run(command, env=environment, capture_output=True, text=True, check=False)
    assert done.stdout.split() == ["measure"]
