import pickle
import subprocess
import sys

import pytest
import typer
from typer.testing import CliRunner

from spatiq import __version__
from spatiq.cli.guard import guarded, os_error_text
from spatiq.cli.main import app
from spatiq.errors import InputError


def outcome(raised=None, returned=None):
    """Exit code, stdout and stderr of a guarded command that raises or returns."""
    small = typer.Typer()

    def command() -> int | None:
        typer.echo("begun")
        if raised is not None:
            raise raised
        return returned

    small.command()(guarded(command))
    result = CliRunner().invoke(small, [])
    return result.exit_code, result.stdout, result.stderr


@pytest.mark.nojit
@pytest.mark.parametrize(("returned", "code"), [(None, 0), (0, 0), (1, 1), (3, 3)])
def test_what_a_command_returns_is_the_exit_code(returned, code):
    assert outcome(returned=returned) == (code, "begun\n", "")


@pytest.mark.nojit
@pytest.mark.parametrize(
    ("error", "code", "text"),
    [
        (
            InputError("a.toml", "air.antennas", 99, "1 to 64"),
            2,
            "spatiq: a.toml: air.antennas: found 99; expected 1 to 64\n",
        ),
        (
            FileNotFoundError(2, "No such file or directory", "x.h5"),
            2,
            "spatiq: x.h5: No such file or directory\n",
        ),
        (OSError("two\nlines"), 2, "spatiq: two lines\n"),
        (KeyboardInterrupt(), 130, "spatiq: interrupted; unfinished files are removed\n"),
    ],
)
def test_what_a_command_raises_is_one_line_and_its_exit_code(error, code, text):
    assert outcome(raised=error) == (code, "begun\n", text)


def test_a_fault_of_the_program_is_not_hidden():
    small = typer.Typer()
    small.command()(guarded(lambda: 1 // 0))
    result = CliRunner().invoke(small, [])
    assert isinstance(result.exception, ZeroDivisionError)


@pytest.mark.nojit
def test_an_operating_system_error_without_any_text_still_says_something():
    assert os_error_text(OSError()) == "OSError"


BROKEN_PIPE = """
import typer
from spatiq.cli.guard import guarded
app = typer.Typer()
@app.command()
@guarded
def talk() -> None:
    for number in range(100_000):
        print("line", number)
app()
"""


def test_a_reader_that_stops_early_is_no_fault():
    process = subprocess.Popen(
        [sys.executable, "-c", BROKEN_PIPE], stdout=subprocess.PIPE, stderr=subprocess.PIPE
    )
    assert process.stdout is not None
    assert process.stderr is not None
    assert process.stdout.readline() == b"line 0\n"
    process.stdout.close()
    assert process.stderr.read() == b""
    process.stderr.close()
    assert process.wait(timeout=30) == 0


def program(*arguments):
    return CliRunner().invoke(app, list(arguments))


@pytest.mark.nojit
def test_version():
    result = program("--version")
    assert (result.exit_code, result.stdout) == (0, f"spatiq {__version__}\n")


@pytest.mark.nojit
@pytest.mark.parametrize(
    "arguments", [["mesure"], ["measure"], ["measure", "a", "b", "--rows", "-1"], ["show", "--x"]]
)
def test_wrong_usage_ends_with_2_and_nothing_on_standard_output(arguments):
    result = program(*arguments)
    assert result.exit_code == 2
    assert result.stdout == ""
    assert result.stderr != ""


@pytest.mark.nojit
@pytest.mark.parametrize(
    "path", [["measure"], ["show"], ["link", "explain"], ["link", "schema"], ["link", "manual"]]
)
def test_every_help_text_shows_an_example_of_its_own_command(path):
    result = program(*path, "--help")
    assert result.exit_code == 0
    assert f"Example: spatiq {' '.join(path)}" in " ".join(result.stdout.split())


def test_options_that_cannot_be_are_refused_before_any_file_is_opened():
    result = program("measure", "none.sigmf-meta", "none.toml", "--cfo-range", "0.7")
    assert result.exit_code == 2
    assert result.stderr == (
        "spatiq: receiver options: cfo_range: found 0.7; expected a value from 0.0 to 0.25\n"
    )


def test_results_that_are_not_there_are_one_line(tmp_path):
    result = program("show", str(tmp_path / "none.h5"))
    assert result.exit_code == 2
    assert result.stderr.count("\n") == 1
    assert "none.h5: found no such file" in result.stderr


def test_input_errors_pass_between_processes():
    """Workers hand their errors on pickled."""
    error = InputError("a file", "a field", 3, "a number below 3")
    again = pickle.loads(pickle.dumps(error))
    assert (str(again), again.field, again.found) == (str(error), "a field", "3")
