"""`spatiq batch` and `spatiq catalogue` from the command line: processes, a cluster, kills."""

from __future__ import annotations

import csv
import json
import os
import shutil
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest
from batch_cases import PERIOD, contents, write_capture, write_link
from typer.testing import CliRunner

from spatiq.batch.catalogue import open_catalogue
from spatiq.batch.catalogue_layout import HOW_AND_WHEN, TABLES
from spatiq.cli.batch_progress import BatchProgress, duration_text, standing_text
from spatiq.cli.main import app

PROGRAM = [sys.executable, "-c", "from spatiq.cli.main import run; run()"]
GOOD = 4


def program(*arguments):
    return CliRunner().invoke(app, [str(a) for a in arguments])


@pytest.fixture(scope="module")
def night(tmp_path_factory):
    """Four good recordings and two broken ones, and results made by two worker processes."""
    folder = tmp_path_factory.mktemp("night")
    link = write_link(folder, PERIOD)
    for k in range(GOOD):
        write_capture(folder / "in", link, f"run-{k}", frames=8 + 4 * (k == 3), seed=k)
    write_capture(folder / "in", link, "torn", frames=2).write_text("{")
    write_capture(folder / "in", link, "void", frames=2).with_suffix(".sigmf-data").write_bytes(b"")
    done = subprocess.run(batch(folder, "results"), capture_output=True, text=True, check=False)
    assert done.returncode == 3, done.stderr
    return folder, done


def batch(folder, out, *more):
    inputs = [folder / "in", "--link", folder / "lab.link.toml", "--out", folder / out]
    how = ["--settle", 0, "--workers", 2, "--split-above", "120kB", *more]
    if "--scheduler" in more:
        how = [h for h in how if h not in ("--workers", 2)]
    return [*PROGRAM, "batch", *(str(i) for i in inputs), *(str(h) for h in how)]


def everything(folder):
    """Catalogue without when and how, and all results, for comparing."""
    tables = {}
    with open_catalogue(folder) as catalogue:
        for name, table in TABLES.items():
            if name != "runs":
                rows = catalogue.rows(f"SELECT * FROM {name} ORDER BY {', '.join(table.key)}")
                tables[name] = [{k: r[k] for k in r if k not in HOW_AND_WHEN} for r in rows]
    files = {p.name: contents(p) for p in sorted((folder / "recordings").iterdir())}
    return tables, files


def test_a_night_is_measured_and_told(night):
    folder, done = night
    assert "2 failed, 4 measured" in done.stdout
    assert "frames found" in done.stdout and "36 of " in done.stdout
    assert "torn.sigmf-meta" in done.stdout and "0 bytes" in done.stdout
    assert "2 worker processes on this machine" in done.stderr
    assert "4 measured; 2 failed" in done.stderr
    results = sorted((folder / "results" / "recordings").glob("*.spatiq.h5"))
    assert len(results) == GOOD


def test_the_catalogue_answers(night):
    folder, _ = night
    place = folder / "results"
    listed = json.loads(program("catalogue", "list", place, "--json").stdout)
    assert [row["name"] for row in listed] == [f"run-{k}" for k in range(GOOD)]
    assert "run-3" in program("catalogue", "list", place, "--sort", "lost").stdout
    assert program("catalogue", "list", place, "--sort", "taste").exit_code == 2
    failed = json.loads(program("catalogue", "failed", place, "--json").stdout)
    assert [row["name"] for row in failed] == ["torn", "void"]
    assert "0 bytes" in program("catalogue", "failed", place).stdout
    shown = json.loads(program("catalogue", "show", place, "run-3", "--json").stdout)
    assert shown["measurement"]["frames_found"] == 12 and shown["trend"]
    text = program("catalogue", "show", place, "run-3").stdout
    assert "frames found" in text and "over time" in text
    assert program("catalogue", "show", place, "run-99").exit_code == 2
    night_now = json.loads(program("catalogue", "night", place, "--json").stdout)
    (group,) = night_now["groups"]
    assert group["frames"]["found"] == 36
    assert group["ber"]["compared"] == sum(row["bits_compared"] for row in listed)
    assert group["ber"]["errors"] == sum(row["bit_errors"] for row in listed)
    assert "bit error ratio" in program("catalogue", "night", place).stdout
    assert program("catalogue", "night", folder / "in").exit_code == 2


def test_the_catalogue_is_exported(night, tmp_path):
    folder, _ = night
    done = program("catalogue", "export", folder / "results", tmp_path / "tables")
    assert done.exit_code == 0, done.stderr
    assert {p.stem for p in (tmp_path / "tables").iterdir()} == set(TABLES)
    with (tmp_path / "tables" / "recordings.csv").open(newline="") as file:
        assert len(list(csv.DictReader(file))) == GOOD + 2
    assert program("catalogue", "export", folder / "results", tmp_path / "tables").exit_code == 2
    again = ["catalogue", "export", folder / "results", tmp_path / "tables", "--overwrite"]
    assert program(*again).exit_code == 0
    assert program("catalogue", "export", folder / "results", tmp_path / "all.json").exit_code == 0
    document = json.loads((tmp_path / "all.json").read_text())
    assert len(document["recordings"]) == GOOD + 2
    assert document["recordings"][0]["summary"]["frames"]["found"] == 8


def test_killed_and_run_again_it_comes_to_the_same(night):
    """The parent, then a worker, get SIGKILL; tools/night.py does so at many moments."""
    folder, _ = night
    command = batch(folder, "killed")
    first = subprocess.Popen(command, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)
    wait_for(lambda: list((folder / "killed" / "recordings").glob("*.h5")))
    first.kill()
    first.wait()
    second = subprocess.Popen(command, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)
    wait_for(lambda: workers_of(second.pid) or second.poll() is not None)
    for worker in workers_of(second.pid)[:1]:
        os.kill(worker, signal.SIGKILL)
    assert second.wait(120) == 3
    assert everything(folder / "killed") == everything(folder / "results")
    assert not list((folder / "killed").rglob("*.part"))
    assert not list((folder / "killed" / ".work").iterdir())


def wait_for(condition, seconds=90.0):
    deadline = time.monotonic() + seconds
    while not condition():
        assert time.monotonic() < deadline
        time.sleep(0.02)


def workers_of(pid):
    """Worker processes, where the system lists them."""
    found = []
    for listed in Path(f"/proc/{pid}/task").glob("*/children"):
        for child in listed.read_text().split() if listed.exists() else []:
            command = Path(f"/proc/{child}/cmdline")
            if command.exists() and b"spawn_main" in command.read_bytes():
                found.append(int(child))
    return found


@pytest.fixture
def cluster(tmp_path):
    """A scheduler and two worker processes; its file, and the workers."""
    file = tmp_path / "scheduler.json"
    log = (tmp_path / "cluster.log").open("wb")

    def start(kind, *options):
        command = [sys.executable, "-m", f"distributed.cli.dask_{kind}", *options]
        return subprocess.Popen(
            [*command, "--scheduler-file", str(file), "--no-dashboard"], stdout=log, stderr=log
        )

    local = ["--nthreads", "1", "--no-nanny", "--local-directory", str(tmp_path / "dask")]
    scheduler = start("scheduler", "--host", "127.0.0.1", "--port", "0")
    wait_for(file.exists)
    workers = [start("worker", *local) for _ in range(2)]
    yield file, workers
    for process in (*workers, scheduler):
        process.terminate()
    for process in (*workers, scheduler):
        process.wait()
    log.close()


def test_on_a_cluster_whose_worker_is_killed_it_comes_to_the_same(night, cluster):
    folder, _ = night
    file, workers = cluster
    command = batch(folder, "cluster", "--scheduler", file)
    run = subprocess.Popen(command, stdout=subprocess.DEVNULL, stderr=subprocess.PIPE, text=True)
    wait_for(lambda: list((folder / "cluster" / "recordings").glob("*.h5")))
    workers[0].kill()
    _, said = run.communicate(timeout=180)
    assert run.returncode == 3, said
    assert "cluster workers" in said
    assert everything(folder / "cluster") == everything(folder / "results")


def test_a_cluster_that_does_not_answer_is_told(night, tmp_path):
    folder, _ = night
    odd = tmp_path / "odd.json"
    odd.write_text("{")
    done = program(
        "batch", folder / "in", "--link", folder / "lab.link.toml", "--out", tmp_path / "r",
        "--scheduler", odd,
    )  # fmt: skip
    assert done.exit_code == 2 and "a scheduler that answers" in done.stderr
    assert len(done.stderr.strip().splitlines()) == 1


@pytest.mark.parametrize(
    ("arguments", "says"),
    [
        (["{in}/nothing*", "--link", "{link}"], "found nothing; expected a recording"),
        (["{in}"], "found neither of them; expected one of them"),
        (["{in}", "--link", "{link}", "--rules", "{link}"], "found both of them"),
        (["{in}", "--link", "{in}"], "Is a directory"),
        (["{in}", "--link", "{link}", "--split-above", "much"], "a size such as"),
        (["{in}", "--link", "{link}", "--set", "cfo=1"], "an unknown option"),
        (["{in}", "--link", "{link}", "--workers", "2", "--scheduler", "a:1"], "one of them"),
    ],
)
def test_bad_input_is_one_line_and_code_2(night, tmp_path, arguments, says):
    folder, _ = night
    places = {"in": folder / "in", "link": folder / "lab.link.toml"}
    given = [a.format(**places) for a in arguments]
    done = program("batch", *given, "--out", tmp_path / "results")
    assert done.exit_code == 2 and says in done.stderr
    assert len(done.stderr.strip().splitlines()) == 1


def test_a_results_folder_that_cannot_be_made_is_told(night, tmp_path):
    folder, _ = night
    (tmp_path / "file").write_text("")
    more = ["--link", folder / "lab.link.toml", "--out", tmp_path / "file" / "results"]
    done = program("batch", folder / "in", *more)
    assert done.exit_code == 2 and "a folder that can be written" in done.stderr


def test_watching_picks_up_what_comes_later(night, tmp_path):
    folder, _ = night
    shutil.copytree(folder / "in", tmp_path / "in", ignore=shutil.ignore_patterns("t*", "v*"))
    shutil.copy(folder / "lab.link.toml", tmp_path)
    late = tmp_path / "late"
    late.mkdir()
    for path in (tmp_path / "in").glob("run-0*"):
        path.rename(late / path.name)
    command = batch(tmp_path, "results", "--watch", "0.5")
    run = subprocess.Popen(command, stdout=subprocess.DEVNULL, stderr=subprocess.PIPE, text=True)
    wait_for(lambda: len(list((tmp_path / "results" / "recordings").glob("*.h5"))) == GOOD - 1)
    for path in late.iterdir():
        path.rename(tmp_path / "in" / path.name)
    wait_for(lambda: len(list((tmp_path / "results" / "recordings").glob("*.h5"))) == GOOD)
    wait_for(lambda: measured(tmp_path / "results") == GOOD)
    run.send_signal(signal.SIGINT)
    _, said = run.communicate(timeout=60)
    assert run.returncode == 130 and "interrupted" in said


def measured(folder):
    with open_catalogue(folder) as catalogue:
        return len(catalogue.rows("SELECT * FROM night"))


class Standing:
    bytes_done, bytes_total, measured, failed, to_do = 3 * 10**9, 9 * 10**9, 4, 1, 12


@pytest.mark.nojit
def test_progress_in_a_log_is_a_line_a_minute(capsys):
    clock = iter([0.0, 0.0, 30.0, 61.0, 90.0, 122.0])
    progress = BatchProgress(lambda: next(clock))
    with progress:
        for _ in range(4):
            progress.show(Standing())
    lines = capsys.readouterr().err.splitlines()
    assert len(lines) == 2
    expected = "4 of 12 recordings, 3.00 of 9.00 GB, 1 failed, 49.2 MB/s, 2 min left"
    assert lines[0] == f"spatiq: {expected}" == f"spatiq: {standing_text(Standing(), 61.0)}"
    assert [duration_text(s) for s in (5, 600, 9000)] == ["5 s", "10 min", "2.5 h"]
