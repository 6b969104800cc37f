"""From a job to tasks: a small recording is one task, a large one several in stages."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Protocol

from spatiq.batch.identity import Content
from spatiq.batch.splitting import (
    Plan,
    clear,
    index_piece,
    join_index,
    measure_share,
    prepare,
    put_together,
    take_digest,
)
from spatiq.batch.work import Job, Outcome, Task, measure_whole

# How the bytes of a recording that is shared out are counted as done, in parts of its size.
_INDEX_SHARE = 0.15
_MEASURE_SHARE = 0.75


class Steps(Protocol):
    """Tasks of one job, one after the other or side by side."""

    job: Job

    def begin(self) -> list[Task]:
        """The first tasks."""
        ...

    def done(self, task: Task, outcome: Outcome) -> list[Task] | Outcome:
        """What a finished task leads to: further tasks (perhaps none yet), or the job's outcome."""
        ...


class WholeSteps:
    """A recording measured in one task."""

    def __init__(self, job: Job, size: int) -> None:
        self.job = job
        self._size = size

    def begin(self) -> list[Task]:
        """See Steps."""
        return [Task(measure_whole, self.job, (), self._size)]

    def done(self, task: Task, outcome: Outcome) -> list[Task] | Outcome:
        """See Steps."""
        return outcome


class SplitSteps:
    """A recording shared out over workers."""

    def __init__(self, job: Job, size: int, share_bytes: int, folder: Path) -> None:
        self.job = job
        self._size = size
        self._share_bytes = share_bytes
        self._folder = folder
        self._waiting = 0
        self._seconds = 0.0
        self._plan: Plan | None = None
        self._fingerprint = ""
        self._content: Content | None = None
        self._bounds: list[tuple[int, int]] = []
        self._there = False

    def begin(self) -> list[Task]:
        """See Steps."""
        return self._tasks([Task(prepare, self.job, (self._share_bytes, self._folder))])

    def _tasks(self, tasks: list[Task]) -> list[Task]:
        self._waiting = len(tasks)
        return tasks

    def done(self, task: Task, outcome: Outcome) -> list[Task] | Outcome:
        """See Steps."""
        self._waiting -= 1
        self._seconds += outcome.seconds
        if task.function is prepare:
            self._plan, self._fingerprint = outcome.found, outcome.fingerprint
        elif task.function is take_digest:
            self._content, self._there = outcome.content, bool(outcome.found)
        elif task.function is join_index:
            self._plan, self._bounds = outcome.found
        if self._waiting:
            return []
        if task.function is measure_whole or (
            task.function is put_together and outcome.found is None
        ):
            clear(self._folder)
            return replace(outcome, seconds=self._seconds)
        return self._tasks(self._next(task, outcome))

    def _next(self, task: Task, outcome: Outcome) -> list[Task]:
        """The next stage, all tasks of the one before being done."""
        plan = self._plan
        assert plan is not None
        if task.function is prepare:
            return [Task(take_digest, self.job, (self._fingerprint,)), *self._pieces(plan)]
        if task.function in (take_digest, index_piece):
            if self._there:
                left = int(self._size * (1 - _INDEX_SHARE))
                return [Task(measure_whole, replace(self.job, content=self._content), (), left)]
            return [Task(join_index, self.job, (plan,))]
        if task.function is join_index and not self._bounds:
            return self._pieces(plan)
        if task.function is join_index:
            size = int(self._size * _MEASURE_SHARE / len(self._bounds))
            return [
                Task(measure_share, self.job, (plan, k, bounds), size)
                for k, bounds in enumerate(self._bounds)
            ]
        if task.function is put_together:
            return [
                Task(measure_share, self.job, (plan, k, self._bounds[k], True))
                for k in outcome.found
            ]
        last = len(self._bounds), self._content, self._fingerprint
        left = int(self._size * (1 - _INDEX_SHARE - _MEASURE_SHARE))
        return [Task(put_together, self.job, (plan, *last), left)]

    def _pieces(self, plan: Plan) -> list[Task]:
        """Search for frames, piece by piece."""
        pieces = len(plan.cuts) + 1
        size = int(self._size * _INDEX_SHARE / pieces)
        return [
            Task(index_piece, self.job, (plan, k, self._fingerprint), size) for k in range(pieces)
        ]
