"""Progress on standard error, for work that takes longer than a second."""

from __future__ import annotations

import threading
from types import TracebackType
from typing import Protocol

from rich.console import Console
from rich.progress import BarColumn, Progress, TextColumn, TimeRemainingColumn

_SHOWN_AFTER_S = 1.0

# Nothing is reported before the first batch; on a new machine most of that time is compiling.
_FIRST_TEXT = "starting (the first run compiles: half a minute)"


class Report(Protocol):
    """What the receiver tells while it works."""

    @property
    def samples_done(self) -> int:
        """Samples per channel that are dealt with."""

    @property
    def samples_total(self) -> int:
        """Samples per channel of the recording."""

    @property
    def frames_found(self) -> int:
        """Frames found so far."""

    @property
    def text(self) -> str:
        """What it is doing; empty while it measures."""


class ProgressBar:
    """A bar that appears after a second and leaves no trace; a context manager.

    Only on terminals: a log file gets nothing.
    """

    def __init__(self) -> None:
        console = Console(stderr=True, highlight=False, markup=False)
        self._progress = Progress(
            TextColumn("{task.description}", markup=False),
            BarColumn(bar_width=20),
            TextColumn("{task.percentage:3.0f} %", markup=False),
            TextColumn("{task.fields[note]}", markup=False),
            TimeRemainingColumn(),
            console=console,
            transient=True,
            disable=not console.is_terminal,
        )
        self._task = self._progress.add_task(_FIRST_TEXT, total=None, note="")
        self._lock = threading.Lock()
        self._over = False
        self._timer = threading.Timer(_SHOWN_AFTER_S, self._appear)
        self._timer.daemon = True

    def __enter__(self) -> ProgressBar:
        """Start the second."""
        self._timer.start()
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        """Remove the bar."""
        self._timer.cancel()
        with self._lock:
            self._over = True
            self._progress.stop()

    def _appear(self) -> None:
        with self._lock:
            if not self._over:
                self._progress.start()

    def __call__(self, report: Report) -> None:
        """Take a report of the receiver."""
        self._progress.update(
            self._task,
            description=report.text or "measuring",
            completed=report.samples_done,
            total=report.samples_total,
            note=f"{report.frames_found:,} frames",
        )

    def stage(self, text: str) -> None:
        """Name a stage that has no measure of its own."""
        self._progress.update(self._task, description=text, total=None)
