"""Progress of a batch: a bar on terminals, else a line a minute; rate and time left by bytes."""

from __future__ import annotations

import sys
import time
from collections.abc import Callable
from types import TracebackType
from typing import Protocol

from rich.console import Console
from rich.progress import BarColumn, Progress, TextColumn

LINE_EVERY_S = 60.0


class Standing(Protocol):
    """How far a round is."""

    @property
    def bytes_done(self) -> int:
        """Bytes dealt with."""

    @property
    def bytes_total(self) -> int:
        """Bytes to be dealt with."""

    @property
    def measured(self) -> int:
        """Recordings measured."""

    @property
    def failed(self) -> int:
        """Recordings that failed."""

    @property
    def to_do(self) -> int:
        """Recordings that were to be measured."""


def standing_text(standing: Standing, seconds: float) -> str:
    """How far, how fast, how long still."""
    done, total = standing.bytes_done, standing.bytes_total
    parts = [
        f"{standing.measured} of {standing.to_do} recordings",
        f"{done / 1e9:.2f} of {total / 1e9:.2f} GB",
    ]
    if standing.failed:
        parts.append(f"{standing.failed} failed")
    if done and seconds > 0:
        rate = done / seconds
        parts.append(f"{rate / 1e6:.1f} MB/s")
        parts.append(f"{duration_text((total - done) / rate)} left")
    return ", ".join(parts)


def duration_text(seconds: float) -> str:
    """A duration in hours, minutes or seconds."""
    if seconds < 90:
        return f"{seconds:.0f} s"
    if seconds < 5400:
        return f"{seconds / 60:.0f} min"
    return f"{seconds / 3600:.1f} h"


class BatchProgress:
    """Shows the standing of a round; a context manager.

    Args:
        clock: seconds, monotonic; to be replaced in tests.
    """

    def __init__(self, clock: Callable[[], float] = time.monotonic) -> None:
        self._clock = clock
        self._began = self._told = clock()
        console = Console(stderr=True, highlight=False, markup=False)
        self._bar = Progress(
            BarColumn(bar_width=24),
            TextColumn("{task.percentage:3.0f} %", markup=False),
            TextColumn("{task.description}", markup=False),
            console=console,
            transient=True,
            disable=not console.is_terminal,
        )
        self._lines = not console.is_terminal
        self._task = self._bar.add_task("starting", total=None)

    def __enter__(self) -> BatchProgress:
        """Begin to count the time."""
        self._began = self._told = self._clock()
        self._bar.start()
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        """Remove the bar."""
        self._bar.stop()

    def show(self, standing: Standing) -> None:
        """Take the standing; called every second."""
        now = self._clock()
        text = standing_text(standing, now - self._began)
        self._bar.update(
            self._task,
            description=text,
            completed=standing.bytes_done,
            total=standing.bytes_total or None,
        )
        if self._lines and now - self._told >= LINE_EVERY_S:
            self._told = now
            print(f"spatiq: {text}", file=sys.stderr, flush=True)
