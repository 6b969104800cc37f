"""The two commands of the repository: what they decide, with their work left out."""

import importlib
import json
import os
import subprocess
import sys
from pathlib import Path
from types import SimpleNamespace

import pytest

TOOLS = Path(__file__).resolve().parents[2] / "tools"


@pytest.fixture
def tool(monkeypatch):
    """A module of tools/ by name, as Python finds it when the tool is run."""
    monkeypatch.syspath_prepend(str(TOOLS))
    loaded = []

    def load(name):
        sys.modules.pop(name, None)
        loaded.append(name)
        return importlib.import_module(name)

    yield load
    for name in loaded:
        sys.modules.pop(name, None)


def test_the_tools_need_nothing_but_the_standard_library():
    # -I -S: neither site-packages nor the environment's settings.
    code = f"import sys; sys.path.insert(0, {str(TOOLS)!r}); import _setup, demo, test"
    done = subprocess.run([sys.executable, "-I", "-S", "-c", code], check=False)
    assert done.returncode == 0


@pytest.mark.parametrize(
    ("expected", "found", "agrees"),
    [
        ({"equals": 0}, 0, True),
        ({"equals": 0}, 1, False),
        ({"equals": 0}, None, False),
        ({"from": 1, "to": 2}, 1.0, True),
        ({"from": 1, "to": 2}, 2.01, False),
        ({"from": 1, "to": 2}, None, False),
        ({"missing": True}, None, True),
        ({"missing": True}, 0, False),
    ],
)
def test_demo_judges_a_figure(tool, expected, found, agrees):
    assert tool("demo").verdict(expected, found)[0] is agrees


@pytest.mark.parametrize("expected", [{}, {"from": 1}, {"missing": False}, {"equal": 1}])
def test_demo_refuses_an_expectation_that_says_nothing(tool, expected):
    demo = tool("demo")
    with pytest.raises(ValueError, match="neither equals, missing, nor from and to"):
        demo.verdict(expected, 1)


def test_demo_prints_each_figure_and_notices_one_that_is_off(tool, tmp_path, capsys):
    demo = tool("demo")
    file = tmp_path / "a.expected.json"
    figures = {"ber.errors": {"equals": 0}, "snr_db.mean": {"from": 19, "to": 20}}
    file.write_text(json.dumps({"about": "a bench", "figures": figures}))
    assert demo.compare({"ber": {"errors": 0}, "snr_db": {"mean": 19.5}}, file)
    assert not demo.compare({"ber": {"errors": 0}, "snr_db": {"mean": 25.0}}, file)
    text = capsys.readouterr().out
    assert text.count("a bench") == 2
    assert text.count("NOT AS EXPECTED") == 1


def test_the_environment_is_made_anew_when_the_project_file_changes(tool, tmp_path):
    setup = tool("_setup")
    (tmp_path / "pyproject.toml").write_text("a = 1")
    first = setup.stamp(tmp_path)
    assert setup.stamp(tmp_path) == first
    (tmp_path / "pyproject.toml").write_text("a = 2")
    assert setup.stamp(tmp_path) != first


def made_environment(setup, folder):
    """An environment as `prepare` leaves it, without anything in it."""
    (folder / "pyproject.toml").write_text("a = 1")
    python = setup.program(folder, "python")
    python.parent.mkdir(parents=True)
    python.touch()
    (folder / ".venv" / "spatiq-stamp").write_text(setup.stamp(folder))
    return python


def test_an_environment_that_is_up_to_date_is_used_as_it_is(tool, tmp_path, monkeypatch, capsys):
    setup = tool("_setup")
    python = made_environment(setup, tmp_path)
    monkeypatch.setattr(setup.venv, "create", lambda *a, **k: pytest.fail("made anew"))
    assert setup.prepare(tmp_path) == python
    assert capsys.readouterr().out == ""


def test_a_failed_installation_is_tried_again_the_next_time(tool, tmp_path, monkeypatch):
    setup = tool("_setup")
    made_environment(setup, tmp_path)
    (tmp_path / "pyproject.toml").write_text("a = 2")
    monkeypatch.setattr(setup.venv, "create", lambda *a, **k: None)
    monkeypatch.setattr(setup.subprocess, "run", lambda *a, **k: SimpleNamespace(returncode=1))
    for _ in range(2):
        with pytest.raises(SystemExit, match="The installation failed"):
            setup.prepare(tmp_path)
    assert not (tmp_path / ".venv" / "spatiq-stamp").exists()


@pytest.mark.parametrize(
    ("arguments", "codes", "outcome", "runs"),
    [
        ([], [0, 0], 0, 2),
        ([], [1], 1, 1),
        ([], [0, 1], 1, 2),
        ([], [0, 5], 5, 2),
        (["-k", "crc"], [0, 5], 0, 2),
        (["-k", "none"], [5, 5], 5, 2),
    ],
)
def test_both_runs_must_pass(tool, monkeypatch, arguments, codes, outcome, runs):
    test = tool("test")
    calls = []

    def run(command, **options):
        calls.append((command, options.get("env", {}).get("NUMBA_DISABLE_JIT")))
        return SimpleNamespace(returncode=codes[len(calls) - 1])

    monkeypatch.setattr(test, "prepare", lambda: "python")
    monkeypatch.setattr(test.subprocess, "run", run)
    assert test.main(arguments) == outcome
    assert len(calls) == runs
    assert calls[0] == (["python", "-m", "pytest", *arguments], None)
    if runs == 2:
        assert calls[1] == (["python", "-m", "pytest", *arguments, "-m", "nojit"], "1")


def test_the_check_of_everything_can_be_run():
    script = TOOLS.parent / ".ci" / "run"
    assert os.access(script, os.X_OK)
    assert subprocess.run(["bash", "-n", str(script)], check=False).returncode == 0
