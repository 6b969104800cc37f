"""Kill the batch, or one of its workers, at random moments, until it has had enough kills."""

from __future__ import annotations

import os
import random
import signal
import subprocess
import time
from collections.abc import Sequence
from pathlib import Path

IN_PART = 3


def children(pid: int) -> list[int]:
    """Worker processes of a batch: its children that run the program's Python."""
    found = []
    for listed in Path(f"/proc/{pid}/task").glob("*/children"):  # each thread has its own
        try:
            for child in map(int, listed.read_text().split()):
                if b"spawn_main" in Path(f"/proc/{child}/cmdline").read_bytes():
                    found.append(child)
        except OSError:
            continue  # it has just ended
    return found


def run_with_kills(
    command: Sequence[str], kills: int, longest_s: float, seed: int, log: Path
) -> tuple[int, int, int]:
    """Run a command again and again under SIGKILL; how often parent and workers were hit, and runs.

    When it ends by itself before it has had all its kills, that is the end.
    """
    chance = random.Random(seed)
    parents = workers = runs = 0
    with log.open("ab") as output:
        while parents + workers < kills:
            runs += 1
            process = subprocess.Popen(command, stdout=output, stderr=output)
            while parents + workers < kills:
                try:
                    process.wait(chance.uniform(0.05, longest_s))
                    break
                except subprocess.TimeoutExpired:
                    pass
                targets = children(process.pid)
                if targets and chance.random() < 0.7:
                    os.kill(chance.choice(targets), signal.SIGKILL)
                    workers += 1
                else:
                    process.kill()
                    process.wait()
                    parents += 1
                    break
            else:
                process.kill()
                process.wait()
            if process.returncode in (0, IN_PART):
                break
    time.sleep(1.5)  # orphaned workers notice, and end
    return parents, workers, runs
