"""Checks of a night: all that is good measured, all that is broken listed with its right reason."""

from __future__ import annotations

import argparse
import json
import subprocess
import time
from pathlib import Path
from typing import Any

from campaign.environment import spatiq_command
from campaign.night_cluster import Cluster
from campaign.night_comparing import differences
from campaign.night_killing import run_with_kills
from campaign.night_making import Night, make_night

IN_PART = 3
_LONGEST_S = 5.0  # from one kill to the next; a start takes about two
_SPLIT_ABOVE = "300kB"  # makes several shares of a small recording


def batch_command(night: Night, out: Path, *more: str) -> list[str]:
    """The command that measures a night."""
    inputs = [str(night.folder), "--rules", str(night.rules), "--out", str(out)]
    return [*spatiq_command(), "batch", *inputs, "--settle", "0", *more]


def _run(command: list[str]) -> tuple[int, str, float]:
    began = time.monotonic()
    done = subprocess.run(command, capture_output=True, text=True, check=False)
    if done.returncode not in (0, IN_PART):
        print(done.stderr)
    return done.returncode, done.stdout, time.monotonic() - began


def check_night(folder: Path, arguments: argparse.Namespace) -> int:
    """Measure a night once, and once more; 1 when anything is not as it must be."""
    began = time.monotonic()
    night = make_night(folder / "night", arguments.recordings, arguments.seed)
    print(f"made {arguments.recordings} recordings in {time.monotonic() - began:.0f} s")
    out = folder / "results"
    command = batch_command(night, out, "--json", "--workers", str(arguments.workers))
    code, text, seconds = _run(command)
    figures = json.loads(text)
    faults = night_faults(night, out, figures)
    if code != IN_PART:
        faults.append(f"exit code {code}, expected {IN_PART}")
    again, text, second = _run(command)
    if json.loads(text) != figures or again != IN_PART:
        faults.append("the second run came to something else")
    good = len(night.frames)
    print(f"good recordings      {good}, all measured" if not faults else f"good {good}")
    print(f"broken recordings    {len(night.broken)}, in {min(10, len(night.broken))} ways")
    print(f"stand out            {len({r['name'] for r in figures['standouts']})}")
    print(f"time                 {seconds:.1f} s, {seconds / good * 1e3:.0f} ms a recording")
    print(f"second run           {second:.1f} s, nothing measured")
    return report(faults)


def night_faults(night: Night, out: Path, figures: dict[str, Any]) -> list[str]:
    """Whatever a measured night shows other than it must."""
    listed = json.loads(_run([*spatiq_command(), "catalogue", "list", str(out), "--json"])[1])
    found = {row["name"]: row["frames_found"] for row in listed}
    faults = [
        f"{n}: found {found.get(n)} of {f} frames"
        for n, f in night.frames.items()
        if found.get(n) != f
    ]
    faults += [f"{name}: measured, but broken" for name in found if name not in night.frames]
    reasons = {row["path"]: row["reason"] for row in figures["failed"]}
    for path, words in night.broken.items():
        reason = reasons.pop(path, None)
        if reason is None or words not in reason:
            faults.append(f"{path}: reason {reason!r}, expected one with {words!r}")
    faults += [f"{path}: failed, but good: {reason}" for path, reason in reasons.items()]
    total = sum(group["frames"]["found"] for group in figures["groups"])
    if total != sum(night.frames.values()):
        faults.append(f"{total} frames in the night, expected {sum(night.frames.values())}")
    told = {row["name"] for row in figures["standouts"]}
    faults += [f"{name}: does not stand out" for name in night.apart if name not in told]
    return faults


def check_kills(folder: Path, arguments: argparse.Namespace) -> int:
    """A night under SIGKILL against an undisturbed one."""
    night = make_night(folder / "night", arguments.recordings, arguments.seed, frames=48)
    calm, killed = folder / "calm", folder / "killed"
    more = ["--split-above", _SPLIT_ABOVE]
    local = [*more, "--workers", str(arguments.workers)]
    seconds = _run(batch_command(night, calm, *local))[2]
    print(f"undisturbed          {seconds:.1f} s")
    if arguments.cluster:
        with Cluster(folder, arguments.cluster) as cluster:
            how = [*more, "--scheduler", str(cluster.file)]
            hits = cluster.run_with_kills(
                batch_command(night, killed, *how), arguments.kills, arguments.seed
            )
            print(f"killed               cluster workers {hits} times")
            code = _run(batch_command(night, killed, *how, "--retry-failed"))[0]
    else:
        parents, workers, runs = run_with_kills(
            batch_command(night, killed, *local),
            arguments.kills,
            _LONGEST_S,
            arguments.seed,
            folder / "killed.log",
        )
        print(f"killed               parent {parents} times, workers {workers}; {runs} runs")
        code = _run(batch_command(night, killed, *local, "--retry-failed"))[0]
    faults = [] if code == IN_PART else [f"exit code {code}, expected {IN_PART}"]
    faults += differences(calm, killed)
    faults += [f"left behind: {p}" for p in killed.rglob("*.part")]
    faults += [f"left behind: {p}" for p in (killed / ".work").iterdir()]
    return report(faults)


def report(faults: list[str]) -> int:
    """Faults, or that there are none; the exit code."""
    for fault in faults[:20]:
        print(f"FAULT {fault}")
    print(f"faults               {len(faults)}")
    return 1 if faults else 0
