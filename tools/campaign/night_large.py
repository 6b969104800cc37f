"""One large recording: cut at random places; timed on one worker and two, against `measure`."""

from __future__ import annotations

import os
import resource
import subprocess
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np

from campaign.environment import spatiq_command
from campaign.night_checks import report
from campaign.night_comparing import results_contents
from campaign.night_making import make_night
from campaign.speed_recordings import KINDS, make_recording
from spatiq.batch import splitting
from spatiq.batch.inputs import find_items
from spatiq.batch.steps import SplitSteps
from spatiq.batch.work import RESULTS_FOLDER, Job, Outcome, measure_whole, run_task
from spatiq.receiver import framing
from spatiq.receiver.options import ReceiverOptions
from spatiq.recording.recording import Recording

# Starting the program takes a few seconds, which more recordings make small.
_COPIES = 9


def check_splits(folder: Path, trials: int, seed: int) -> int:
    """One recording cut at random places by numbers of workers at random, against a single pass."""
    night = make_night(folder / "night", 2, seed, frames=60, share_broken=0.0)
    framing._BATCH_FRAMES = 6  # so that there is something to share out
    rng = np.random.default_rng(seed)
    faults, shares = [], 0
    for name in sorted(night.frames):
        kind = name.split("-")[0]
        meta = night.folder / kind / f"{name}.sigmf-meta"
        link = night.folder / f"{kind}.link.toml"
        whole = _job(folder / "whole", meta, link)
        expected = results_contents(whole.target(measure_whole(whole).measurement))
        for trial in range(trials // 2):
            count = int(rng.integers(1, 12))
            splitting.plan_cuts = _random_cuts(rng, count)
            job = _job(folder / f"{name}-{trial}", meta, link)
            size = meta.with_suffix(".sigmf-data").stat().st_size
            tasks, target = _in_any_order(
                job, folder / "work", size // int(rng.integers(2, 9)), rng
            )
            shares += tasks
            if results_contents(target) != expected:
                faults.append(f"{name}, trial {trial}: results differ")
    print(f"cuts                 {trials} times 1 to 11 at random, {shares} shares in all")
    return report(faults)


def _job(folder: Path, meta: Path, link: Path) -> Job:
    (folder / RESULTS_FOLDER).mkdir(parents=True, exist_ok=True)
    (item,) = find_items([str(meta)])
    return Job(item, link, ReceiverOptions(), folder, 1e-2)


def _random_cuts(
    rng: np.random.Generator, count: int
) -> Callable[[Recording, int], tuple[int, ...]]:
    def cuts(recording: Recording, _: int) -> tuple[int, ...]:
        return tuple(np.sort(rng.integers(0, recording.n_samples + 1, count)).tolist())

    return cuts


def _in_any_order(
    job: Job, work: Path, share_bytes: int, rng: np.random.Generator
) -> tuple[int, Path]:
    """Do all tasks of a job in an order of chance, as workers might; shares, results file."""
    steps = SplitSteps(job, 1, max(share_bytes, 1), work)
    ready, shares = steps.begin(), 0
    while ready:
        task = ready.pop(int(rng.integers(len(ready))))
        shares += task.function is splitting.measure_share
        more = steps.done(task, run_task(task))
        if isinstance(more, Outcome):
            return shares, job.target(more.measurement)
        ready += more
    raise RuntimeError("no outcome")


def _timed(command: list[str]) -> tuple[float, float]:
    """Wall time and processor time of a command with all its processes, s."""
    before = resource.getrusage(resource.RUSAGE_CHILDREN)
    began = time.monotonic()
    subprocess.run(command, check=True, capture_output=True, env=os.environ)
    wall = time.monotonic() - began
    after = resource.getrusage(resource.RUSAGE_CHILDREN)
    used = after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime
    return wall, used


def check_scaling(folder: Path, megabytes: float, seed: int) -> int:
    """Recordings on one worker and on two; one shared out; all against plain `measure`."""
    night = folder / "scaling"
    night.mkdir(parents=True, exist_ok=True)
    made = make_recording(night, KINDS[0], int(megabytes * 1e6 / 8))
    data = made.meta.with_suffix(".sigmf-data")
    copies = [made.meta]
    for k in range(_COPIES):
        copies.append(_another(made.meta, k))
    size = data.stat().st_size
    program = spatiq_command()
    plain = [0.0, 0.0]
    for k, meta in enumerate(copies):
        out = ["--out", str(folder / f"plain-{k}.h5"), "--overwrite", "--rows", "0"]
        wall, used = _timed([*program, "measure", str(meta), str(made.link), *out])
        plain = [plain[0] + wall, plain[1] + used]
    rows = {"plain measure, one after the other": tuple(plain)}
    for workers in (1, 2):
        rows[f"batch, {workers} worker{'s' if workers > 1 else ''}"] = _batch(
            folder / f"batch-{workers}", night, made.link, workers, "1TB"
        )
    single = night / "single"
    single.mkdir()
    for ending in (".sigmf-meta", ".sigmf-data"):
        (single / f"one{ending}").hardlink_to(made.meta.with_suffix(ending))
    for workers in (1, 2):
        rows[f"one recording shared out, {workers}"] = _batch(
            folder / f"split-{workers}", single, made.link, workers, f"{int(size / 2)}"
        )
    rows["one recording, whole"] = _batch(folder / "whole", single, made.link, 1, "1TB")
    print("Other work on the machine shows in wall time; processor time tells what is done.")
    print(f"{len(copies)} recordings of {size / 1e6:.0f} MB; wall s, processor s")
    for name, (wall, used) in rows.items():
        print(f"  {name:40} {wall:8.2f} {used:8.2f}")
    one, two = rows["batch, 1 worker"], rows["batch, 2 workers"]
    print(f"two workers against one      {one[0] / two[0]:.2f} times as fast (bar 1.8)")
    print(f"  processor time, the same   {two[1] / one[1]:.3f}")
    print(f"overhead against measure     {100 * (one[0] / plain[0] - 1):+.1f} % wall, ", end="")
    print(f"{100 * (one[1] / plain[1] - 1):+.1f} % processor (bar 5 %)")
    split, shared = rows["one recording, whole"], rows["one recording shared out, 2"]
    print(f"one shared out over two      {split[0] / shared[0]:.2f} times as fast, ", end="")
    print(f"{100 * (shared[1] / split[1] - 1):+.1f} % processor time")
    return 0


def _another(meta: Path, k: int) -> Path:
    """The same samples but for the last: another content."""
    copy = meta.with_name(f"copy-{k}.sigmf-meta")
    data = bytearray(meta.with_suffix(".sigmf-data").read_bytes())
    data[-1 - k] ^= 1
    copy.with_suffix(".sigmf-data").write_bytes(data)
    text = meta.read_text()
    copy.write_text(text)
    return copy


def _batch(out: Path, folder: Path, link: Path, workers: int, split: str) -> tuple[float, float]:
    inputs = [str(folder / "*.sigmf-meta"), "--link", str(link), "--out", str(out)]
    how = ["--workers", str(workers), "--split-above", split, "--settle", "0", "--json"]
    return _timed([*spatiq_command(), "batch", *inputs, *how])
