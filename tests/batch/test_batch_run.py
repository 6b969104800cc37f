"""A round over recordings: nothing twice, nothing lost, faults set aside with their reasons."""

from __future__ import annotations

import errno
import json
import multiprocessing
import os
import resource
import shutil
import subprocess
import sys
import time
from concurrent.futures import Future, ProcessPoolExecutor

import pytest
from batch_cases import PERIOD, differences, write_capture, write_link

from spatiq.batch.catalogue import open_catalogue
from spatiq.batch.claims import Claims
from spatiq.batch.executors import WorkerDied
from spatiq.batch.inputs import find_items
from spatiq.batch.rules import one_link
from spatiq.batch.run import Round, clear_leftovers, is_folder_fault, prepare_folder
from spatiq.batch.survey import Terms
from spatiq.batch.work import RESULTS_FOLDER, Job, StillGrowing, Task, measure_whole, run_task
from spatiq.errors import InputError
from spatiq.receiver.options import ReceiverOptions


class HereAndNow:
    """Tasks done in this process as they are handed in; `faults` come instead of a task's own."""

    count = 1
    place = "here"

    def __init__(self, faults=()):
        self.faults = list(faults)
        self.done = []

    def submit(self, task):
        future: Future = Future()
        fault = self.faults.pop(0) if self.faults else None
        if fault is None:
            self.done.append((task.function.__name__, task.job.item.stem))
            try:
                future.set_result(run_task(task))
            except InputError as error:
                future.set_exception(error)
        else:
            future.set_exception(fault)
        return future


@pytest.fixture(scope="module")
def made(tmp_path_factory):
    """Three good recordings on one link."""
    folder = tmp_path_factory.mktemp("made")
    link = write_link(folder, PERIOD)
    for k, name in enumerate(("a", "b", "c")):
        write_capture(folder / "night", link, name, frames=4 + k, seed=k)
    return folder


@pytest.fixture
def bench(made, tmp_path):
    shutil.copytree(made, tmp_path / "bench")
    return tmp_path / "bench"


def one_round(bench, workers=None, split_above=10**12, settle_s=0.0, out="results", **terms):
    folder = bench / out
    prepare_folder(folder)
    rules = one_link(bench / "lab.link.toml", terms.pop("options", ReceiverOptions()))
    terms = Terms(folder, rules, terms.pop("bound", 1e-2), settle_s, **terms)
    workers = workers or HereAndNow()
    with open_catalogue(folder, create=True) as catalogue, Claims(folder) as claims:
        clear_leftovers(folder, claims)
        round_ = Round(terms, catalogue, claims, workers, split_above, lambda _: None)
        tally = round_.run(find_items([str(bench / "night")]))
    return tally, workers.done


def rows(bench, query, out="results"):
    with open_catalogue(bench / out) as catalogue:
        return catalogue.rows(query)


def states(bench):
    return {r["name"]: (r["state"], r["reason"]) for r in rows(bench, "SELECT * FROM recordings")}


def test_what_is_done_is_not_done_again(bench):
    tally, done = one_round(bench)
    assert (tally.measured, tally.known) == (3, 0)
    assert sorted(done) == [("measure_whole", name) for name in "abc"]
    assert done[0][1] == "c"  # the largest first
    night = rows(bench, "SELECT name, frames_found, bits_compared, results_file FROM night")
    assert {r["name"]: r["frames_found"] for r in night} == {"a": 4, "b": 5, "c": 6}
    assert all((bench / "results" / r["results_file"]).is_file() for r in night)
    tally, done = one_round(bench)
    assert (tally.measured, tally.known, done) == (0, 3, [])


def test_only_what_has_changed_is_done(bench):
    one_round(bench)
    write_capture(bench / "night", bench / "lab.link.toml", "b", frames=9, seed=77)
    write_capture(bench / "night", bench / "lab.link.toml", "d", frames=2, seed=78)
    tally, done = one_round(bench)
    assert sorted(name for _, name in done) == ["b", "d"] and tally.known == 2
    assert rows(bench, "SELECT frames_found FROM night WHERE name = 'b'") == [{"frames_found": 9}]
    # Results of what it was before stay in the catalogue, and their file.
    assert len(rows(bench, "SELECT * FROM measurements")) == 5
    assert len(list((bench / "results" / RESULTS_FOLDER).iterdir())) == 5


@pytest.mark.parametrize(
    ("what", "again"),
    [
        ({"options": ReceiverOptions(cfo_range=0.03)}, 3),
        ({"options": ReceiverOptions(block_size=2048)}, 0),  # changes no figure
        ({"bound": 0.2}, 3),
    ],
)
def test_options_that_can_change_a_figure_make_another_measurement(bench, what, again):
    one_round(bench)
    tally, done = one_round(bench, **what)
    assert len(done) == tally.measured == again


def test_a_link_that_changes_makes_another_measurement(bench):
    one_round(bench)
    link = bench / "lab.link.toml"
    link.write_text(link.read_text() + "\n# another version\n")
    assert one_round(bench)[0].measured == 3


def test_touched_or_moved_recordings_are_recognised_by_content(bench):
    one_round(bench)
    before = {p.name: p.stat().st_mtime_ns for p in (bench / "results" / RESULTS_FOLDER).iterdir()}
    os.utime(bench / "night" / "a.sigmf-data", (1, 1))
    (bench / "night" / "moved").mkdir()
    for ending in ("meta", "data"):
        name = f"b.sigmf-{ending}"
        (bench / "night" / name).rename(bench / "night" / "moved" / name)
    tally, done = one_round(bench)
    assert len(done) == tally.measured == 2
    after = {p.name: p.stat().st_mtime_ns for p in (bench / "results" / RESULTS_FOLDER).iterdir()}
    assert after == before  # nothing was written anew
    assert len(rows(bench, "SELECT * FROM measurements")) == 3


def test_results_without_an_entry_are_entered(bench):
    """The parent was killed between a worker's renaming and its own entry."""
    one_round(bench)
    query = "SELECT measurement, ber, frames_found FROM measurements ORDER BY 1"
    first = rows(bench, query)
    files = {p: p.stat().st_mtime_ns for p in (bench / "results" / RESULTS_FOLDER).iterdir()}
    (bench / "results" / "catalogue.sqlite").unlink()
    one_round(bench)
    assert (
        rows(bench, "SELECT measurement, ber, frames_found FROM measurements ORDER BY 1") == first
    )
    assert {p: p.stat().st_mtime_ns for p in files} == files


def test_lost_or_damaged_results_are_made_again(bench):
    one_round(bench)
    one, other, _ = sorted((bench / "results" / RESULTS_FOLDER).iterdir())
    kept = shutil.copy(one, bench / "kept.h5")
    one.unlink()
    assert one_round(bench)[0].measured == 1
    assert differences(bench / "kept.h5", one) == [] and kept
    other.write_bytes(other.read_bytes()[:3000])
    rows_before = rows(bench, "SELECT * FROM losses")
    os.utime(bench / "night" / "b.sigmf-data", (2, 2))
    assert one_round(bench)[0].measured == 1 and rows(bench, "SELECT * FROM losses") == rows_before
    assert other.stat().st_size > 3000


def test_broken_ones_are_set_aside_and_the_rest_goes_on(bench):
    meta = bench / "night" / "b.sigmf-meta"
    good = meta.read_text()
    meta.write_text(good[:50])
    data = bench / "night" / "c.sigmf-data"
    data.write_bytes(b"")
    tally, done = one_round(bench)
    assert (tally.measured, tally.failed) == (1, 2) and done == [("measure_whole", "a")]
    found = states(bench)
    assert found["a"] == ("measured", "")
    assert found["b"][0] == "failed" and "b.sigmf-meta" in found["b"][1]
    assert found["c"][0] == "failed" and "0 bytes" in found["c"][1]
    # Not tried again until asked for, or until it changes.
    tally, _ = one_round(bench)
    assert (tally.failed, tally.failed_before) == (0, 2)
    assert one_round(bench, retry_failed=True)[0].failed == 2
    meta.write_text(good)
    tally, _ = one_round(bench)
    assert (tally.measured, tally.failed_before) == (1, 1)


def test_a_fault_that_shows_only_while_it_is_measured(bench):
    meta = bench / "night" / "b.sigmf-meta"
    document = json.loads(meta.read_text())
    document["global"]["core:sample_rate"] = 1e9
    meta.write_text(json.dumps(document))
    tally, done = one_round(bench)
    assert (tally.measured, tally.failed, len(done)) == (2, 1, 3)
    assert "1.25 to 64 samples per symbol" in states(bench)["b"][1]
    assert tally.failures[0][1] == states(bench)["b"][1]


def test_data_that_differ_from_their_stated_hash(bench):
    data = bench / "night" / "a.sigmf-data"
    changed = bytearray(data.read_bytes())
    changed[5000] ^= 1
    data.write_bytes(changed)
    tally, _ = one_round(bench, verify=True)
    assert (tally.measured, tally.failed) == (2, 1)
    assert "as core:sha512 says" in states(bench)["a"][1]


def test_a_young_recording_is_put_off(bench):
    tally, done = one_round(bench, settle_s=3600.0)
    assert (tally.growing, done) == (3, [])
    assert states(bench)["a"][0] == "growing"
    for path in (bench / "night").iterdir():
        os.utime(path, (time.time() - 4000,) * 2)
    assert one_round(bench, settle_s=3600.0)[0].measured == 3


def test_a_recording_that_grows_while_it_is_measured_is_put_off(bench, monkeypatch):
    from spatiq.batch import work

    measure = work.measure

    def growing(recording, *more):
        yield from measure(recording, *more)
        if recording.name == "b":
            with recording.datasets[0].data.path.open("ab") as file:
                file.write(b"\0" * 800)

    monkeypatch.setattr(work, "measure", growing)
    tally, _ = one_round(bench)
    assert (tally.measured, tally.growing, tally.failed) == (2, 1, 0)
    assert states(bench)["b"][0] == "growing"
    assert not [p for p in (bench / "results").rglob("*") if p.name.startswith((".b", "b-"))]
    monkeypatch.undo()
    assert one_round(bench)[0].measured == 1


def test_a_worker_that_dies_is_replaced_and_the_task_done_again(bench):
    died = WorkerDied("the worker was killed or crashed")
    tally, _ = one_round(bench, HereAndNow([died, died]))
    assert (tally.measured, tally.workers_lost) == (3, 2)


def test_a_recording_that_kills_workers_is_set_aside(bench):
    died = WorkerDied("the worker was killed or crashed")
    tally, _ = one_round(bench, HereAndNow([died] * 3))
    assert (tally.measured, tally.failed, tally.workers_lost) == (2, 1, 3)
    assert states(bench)["c"] == (
        "failed",
        "the worker was killed or crashed 3 times: out of memory?",
    )


def test_an_unforeseen_fault_is_told_as_one(bench):
    tally, _ = one_round(bench, HereAndNow([ZeroDivisionError("by\nzero")]))
    assert (tally.measured, tally.failed) == (2, 1)
    assert states(bench)["c"][1] == "unforeseen ZeroDivisionError: by zero"


@pytest.mark.parametrize("number", [errno.ENOSPC, errno.EROFS, errno.EDQUOT])
def test_a_full_or_read_only_results_folder_ends_the_run(bench, number):
    full = OSError(number, os.strerror(number), "somewhere")
    with pytest.raises(InputError, match=os.strerror(number)):
        one_round(bench, HereAndNow([None, full]))
    assert [s[0] for s in states(bench).values()] == ["measured"]
    assert one_round(bench)[0].measured == 2  # what was under way is not lost


def _small_files():
    resource.setrlimit(resource.RLIMIT_FSIZE, (60_000, resource.RLIM_INFINITY))


def test_a_file_that_cannot_grow_is_told_as_what_it_is(bench):
    """The system refuses to let files grow, as it does on a full disk; HDF5 says so in its own way,
    and only in a process of its own does that leave nothing behind."""
    one_round(bench)
    shutil.rmtree(bench / "results")
    prepare_folder(bench / "results")
    (item,) = find_items([str(bench / "night" / "c")])
    job = Job(item, bench / "lab.link.toml", ReceiverOptions(), bench / "results", 1e-2)
    context = multiprocessing.get_context("spawn")
    with ProcessPoolExecutor(1, mp_context=context, initializer=_small_files) as one:
        fault = one.submit(run_task, Task(measure_whole, job)).exception()
    assert isinstance(fault, OSError) and fault.errno == errno.EFBIG
    assert is_folder_fault(fault, bench / "results")
    assert list((bench / "results" / RESULTS_FOLDER).iterdir()) == []


def test_which_faults_are_the_folders(tmp_path):
    inside = tmp_path / RESULTS_FOLDER / "x.h5"
    assert is_folder_fault(InputError(inside, "", "closed to writing", "one"), tmp_path)
    assert is_folder_fault(PermissionError(errno.EACCES, "denied", str(inside)), tmp_path)
    # As HDF5 says it, without an error number.
    assert is_folder_fault(OSError("write failed: 'No space left on device'"), tmp_path)
    outside = tmp_path / "night" / "x.sigmf-data"
    assert not is_folder_fault(InputError(outside, "", "closed", "one"), tmp_path)
    assert not is_folder_fault(StillGrowing(outside, "", "changed", "one"), tmp_path)
    assert not is_folder_fault(ValueError("broken"), tmp_path)


HOLDER = """
import sys, time
from pathlib import Path
from spatiq.batch.claims import Claims
with Claims(Path(sys.argv[1])) as claims:
    print(claims.claim(sys.argv[2]), flush=True)
    time.sleep(60)
"""


def test_what_another_run_has_claimed_is_left_to_it(bench):
    """Another process holds one recording; when it is killed its claim is gone with it."""
    prepare_folder(bench / "results")
    name = str((bench / "night" / "b.sigmf-meta").resolve())
    command = [sys.executable, "-c", HOLDER, str(bench / "results"), name]
    stale = bench / "results" / RESULTS_FOLDER / ".b-1.spatiq.h5.1-2.part"
    stale.touch()
    with subprocess.Popen(command, stdout=subprocess.PIPE, text=True) as other:
        assert other.stdout is not None and other.stdout.readline() == "True\n"
        tally, done = one_round(bench)
        assert (tally.measured, tally.elsewhere) == (2, 1)
        assert "b" not in [n for _, n in done] and "b" not in states(bench)
        assert stale.exists()  # it might be the other's
        other.kill()
    tally, done = one_round(bench)
    assert (tally.measured, tally.known) == (1, 2) and done == [("measure_whole", "b")]
    assert not stale.exists()


def test_two_runs_share_the_work(bench):
    """While this run is at its first recording, another one measures the rest."""
    command = [sys.executable, "-c", "from spatiq.cli.main import run; run()", "batch"]
    command += [bench / "night", "--link", bench / "lab.link.toml", "--out", bench / "results"]

    class Slow(HereAndNow):
        def submit(self, task):
            if not self.done:
                other = subprocess.run(
                    [*command, "--settle", "0"], capture_output=True, check=False
                )
                assert other.returncode == 3 and b"1 in work by another run" in other.stderr
            return super().submit(task)

    tally, done = one_round(bench, Slow())
    assert (tally.measured, tally.known, done) == (1, 2, [("measure_whole", "c")])
    assert len(rows(bench, "SELECT * FROM night")) == 3


def test_shared_out_or_not_the_catalogue_says_the_same(bench):
    one_round(bench)
    _, done = one_round(bench, split_above=40_000, out="split")
    assert {"put_together", "measure_share"} <= {name for name, _ in done}
    query = "SELECT * FROM {} ORDER BY 1, 2"
    for table in ("losses", "antennas", "confusion", "trend", "correlation"):
        assert rows(bench, query.format(table)) == rows(bench, query.format(table), "split")
    one, other = (sorted((bench / o / RESULTS_FOLDER).iterdir()) for o in ("results", "split"))
    assert [p.name for p in one] == [p.name for p in other]
    assert [differences(a, b) for a, b in zip(one, other, strict=True)] == [[]] * 3
    assert list((bench / "split" / ".work").iterdir()) == []
