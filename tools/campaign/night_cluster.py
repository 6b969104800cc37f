"""A Dask cluster of processes on this machine: a scheduler and workers that can be killed."""

from __future__ import annotations

import os
import random
import signal
import subprocess
import sys
import time
from collections.abc import Sequence
from pathlib import Path


class Cluster:
    """A scheduler and worker processes; a context manager.

    Args:
        folder: for the scheduler's file and the workers' own files.
        workers: how many.
    """

    def __init__(self, folder: Path, workers: int) -> None:
        self.file = folder / "scheduler.json"
        self._folder = folder
        self._count = workers
        self._processes: list[subprocess.Popen[bytes]] = []
        self._log = (folder / "cluster.log").open("wb")

    def __enter__(self) -> Cluster:
        """Start them."""
        options = ["--scheduler-file", str(self.file)]
        self._scheduler = self._start(
            "scheduler", "--no-dashboard", "--port", "0", "--host", "127.0.0.1", *options
        )
        self._processes = [self._worker() for _ in range(self._count)]
        return self

    def __exit__(self, *_: object) -> None:
        """End them."""
        for process in (*self._processes, self._scheduler):
            process.terminate()
        for process in (*self._processes, self._scheduler):
            process.wait()
        self._log.close()

    def _start(self, kind: str, *options: str) -> subprocess.Popen[bytes]:
        command = [sys.executable, "-m", "distributed.cli.dask_" + kind, *options]
        return subprocess.Popen(command, stdout=self._log, stderr=self._log)

    def _worker(self) -> subprocess.Popen[bytes]:
        deadline = time.monotonic() + 30
        while not self.file.is_file() and time.monotonic() < deadline:
            time.sleep(0.1)
        return self._start(
            "worker",
            "--scheduler-file",
            str(self.file),
            "--nthreads",
            "1",
            "--no-nanny",
            "--no-dashboard",
            "--local-directory",
            str(self._folder / "dask"),
        )

    def run_with_kills(self, command: Sequence[str], kills: int, seed: int) -> int:
        """Run a command while workers are killed at random moments and new ones started."""
        chance = random.Random(seed)
        hits = 0
        with (self._folder / "killed.log").open("ab") as log:
            process = subprocess.Popen(command, stdout=log, stderr=log)
            while hits < kills:
                try:
                    process.wait(chance.uniform(0.3, 3.0))
                    break
                except subprocess.TimeoutExpired:
                    pass
                k = chance.randrange(len(self._processes))
                os.kill(self._processes[k].pid, signal.SIGKILL)
                self._processes[k].wait()
                self._processes[k] = self._worker()
                hits += 1
            process.wait()
        return hits
