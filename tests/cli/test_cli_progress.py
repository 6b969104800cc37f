import io
import time
from types import SimpleNamespace

import pytest
from rich.console import Console

from spatiq.cli import progress
from spatiq.cli.progress import ProgressBar


def report(done, text=""):
    return SimpleNamespace(samples_done=done, samples_total=1000, frames_found=1234, text=text)


@pytest.fixture
def terminal(monkeypatch):
    """Standard error as a terminal; its text so far."""
    stream = io.StringIO()
    monkeypatch.setattr(
        progress,
        "Console",
        lambda **options: (
            Console(file=stream, force_terminal=True, width=120, **options)
            if options.pop("stderr")
            else None
        ),
    )
    return stream


def test_short_work_shows_nothing(terminal):
    with ProgressBar() as bar:
        bar(report(10))
    assert terminal.getvalue() == ""


def test_long_work_shows_how_far_it_is_and_what_it_does(terminal, monkeypatch):
    monkeypatch.setattr(progress, "_SHOWN_AFTER_S", 0.01)
    with ProgressBar() as bar:
        time.sleep(0.3)
        assert "the first run compiles" in terminal.getvalue()
        bar(report(250))
        time.sleep(0.3)
        bar(report(500, "searching"))
        time.sleep(0.3)
        bar.stage("taking the digest")
        time.sleep(0.3)
    text = terminal.getvalue()
    for words in ("measuring", " 25 %", "1,234 frames", "searching", " 50 %", "taking the digest"):
        assert words in text


def test_a_log_file_gets_nothing(monkeypatch, capsys):
    monkeypatch.setattr(progress, "_SHOWN_AFTER_S", 0.01)
    with ProgressBar() as bar:
        time.sleep(0.1)
        bar(report(250))
    assert capsys.readouterr().err == ""


def test_an_error_takes_the_bar_away(terminal, monkeypatch):
    monkeypatch.setattr(progress, "_SHOWN_AFTER_S", 0.01)
    with pytest.raises(ZeroDivisionError), ProgressBar() as bar:
        time.sleep(0.2)
        bar(report(250))
        raise ZeroDivisionError
    length = len(terminal.getvalue())
    time.sleep(0.3)
    assert len(terminal.getvalue()) == length
