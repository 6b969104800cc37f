"""The run: what is missing is measured, what went wrong is set aside, all is entered at once.

One process, the parent, holds the claims and writes the catalogue; workers write results files.
Whatever is killed, what is done stays done: results files appear whole, catalogue entries are made
after them, and a results file without an entry is entered, not measured again, by the next run.
"""

from __future__ import annotations

import os
import shutil
from collections.abc import Callable, Sequence
from concurrent.futures import FIRST_COMPLETED, Future, wait
from dataclasses import dataclass, field, replace
from datetime import UTC, datetime
from pathlib import Path

from spatiq.batch.catalogue import Catalogue
from spatiq.batch.claims import Claims
from spatiq.batch.executors import WorkerDied, Workers
from spatiq.batch.inputs import Item
from spatiq.batch.steps import SplitSteps, Steps, WholeSteps
from spatiq.batch.survey import Case, State, Survey, Terms
from spatiq.batch.work import RESULTS_FOLDER, Outcome, StillGrowing, Task, folder_fault
from spatiq.errors import InputError
from spatiq.results.provenance import sha256_text

WORK_FOLDER = ".work"
_ATTEMPTS = 3  # at a task whose worker dies


@dataclass
class Tally:
    """How far a round is; handed to whoever shows progress.

    Attributes:
        bytes_total, bytes_done: of the recordings to be measured.
        to_do: recordings to be measured.
        measured, failed: of these, done so far.
        known: measured before, and unchanged.
        growing, elsewhere, left_out: put off; in work by another run; not to be measured.
        failed_before: failed before, and not tried again.
        workers_lost: workers that died.
        peak_bytes: most memory a worker has taken.
    """

    bytes_total: int = 0
    bytes_done: int = 0
    to_do: int = 0
    measured: int = 0
    failed: int = 0
    known: int = 0
    growing: int = 0
    elsewhere: int = 0
    left_out: int = 0
    failed_before: int = 0
    workers_lost: int = 0
    peak_bytes: int = 0
    failures: list[tuple[str, str]] = field(default_factory=list)


@dataclass
class _Work:
    """A job under way."""

    case: Case
    steps: Steps
    ready: list[Task]
    running: int = 0
    died: dict[Task, int] = field(default_factory=dict)
    over: bool = False
    counted: int = 0  # of its bytes, those that count as done


class Round:
    """One pass over the recordings.

    Args:
        terms: what holds for the run.
        catalogue: open for writing.
        claims: entered.
        workers: entered.
        split_above: recordings of more bytes are shared out, in shares of about as many.
        progress: called whenever something is done, and every second.
        warm: whether the kernels are compiled already; if not, one worker goes ahead.
    """

    def __init__(
        self,
        terms: Terms,
        catalogue: Catalogue,
        claims: Claims,
        workers: Workers,
        split_above: int,
        progress: Callable[[Tally], None],
        warm: bool = True,
    ) -> None:
        self._terms = terms
        self._catalogue = catalogue
        self._claims = claims
        self._workers = workers
        self._split_above = split_above
        self._progress = progress
        self._warm = warm
        self._survey = Survey(terms, catalogue)
        self.tally = Tally()

    def run(self, items: Sequence[Item]) -> Tally:
        """Measure what is missing or has changed.

        Raises:
            InputError: the results folder can no longer be written; all that is done is kept.
        """
        todo = self._sort(items)
        pending = self._works(todo)
        running: dict[Future[Outcome], tuple[_Work, Task]] = {}
        active: list[_Work] = []
        try:
            while pending or active:
                self._submit(pending, active, running)
                done, _ = wait(running, timeout=1.0, return_when=FIRST_COMPLETED)
                for future in done:
                    work, task = running.pop(future)
                    self._take(work, task, future)
                for work in [w for w in active if w.over and not w.running]:
                    active.remove(work)
                    self._claims.drop(work.case.name)
                self._progress(self.tally)
        finally:
            for work in active:
                self._claims.drop(work.case.name)
        return self.tally

    def _sort(self, items: Sequence[Item]) -> list[Case]:
        """Enter what is decided at a look; what is left is to be measured."""
        todo = []
        tally = self.tally
        for case in self._survey.cases(items):
            if case.state is State.TO_DO:
                todo.append(case)
                continue
            if case.state is State.FAILED and not case.known:
                tally.failed += 1
                tally.failures.append((case.item.label, case.reason))
            tally.known += case.state is State.MEASURED
            tally.growing += case.state is State.GROWING
            tally.left_out += case.state is State.LEFT_OUT
            tally.failed_before += case.state is State.FAILED and case.known
            if not case.known:
                self._enter(case)
        tally.to_do = len(todo)
        tally.bytes_total = sum(case.look.size for case in todo)
        return todo

    def _works(self, todo: list[Case]) -> list[_Work]:
        """Largest first, so that all workers end together; a small one ahead to compile on."""
        ordered = sorted(todo, key=lambda case: (-case.look.size, case.item))
        if not self._warm and ordered:
            ordered.insert(0, ordered.pop())
        works = []
        for case in ordered:
            job = self._terms.job(case)
            steps: Steps = WholeSteps(job, case.look.size)
            if case.look.size > self._split_above:
                name = sha256_text(f"{case.name} {case.look.text} {case.asked} {self._split_above}")
                folder = self._terms.folder / WORK_FOLDER / name[:20]
                steps = SplitSteps(job, case.look.size, self._split_above, folder)
            works.append(_Work(case, steps, []))
        return works

    def _submit(
        self,
        pending: list[_Work],
        active: list[_Work],
        running: dict[Future[Outcome], tuple[_Work, Task]],
    ) -> None:
        """Keep the workers busy; jobs under way come first."""
        most = self._workers.count if self._warm else 1
        while len(running) < most:
            work = next((w for w in active if w.ready and not w.over), None)
            if work is None:
                if not pending:
                    return
                work = pending.pop(0)
                if not self._is_ours(work.case):
                    continue
                work.ready = work.steps.begin()
                active.append(work)
            task = work.ready.pop(0)
            running[self._workers.submit(task)] = (work, task)
            work.running += 1

    def _is_ours(self, case: Case) -> bool:
        """Claim a recording; not where another run has it, or has measured it in the meantime."""
        claimed = self._claims.claim(case.name)
        if claimed and self._survey.again(case).state is State.TO_DO:
            return True
        self.tally.known += claimed
        self.tally.elsewhere += not claimed
        self.tally.to_do -= 1
        self.tally.bytes_total -= case.look.size
        self._claims.drop(case.name)
        return False

    def _take(self, work: _Work, task: Task, future: Future[Outcome]) -> None:
        """A task has ended, well or not."""
        work.running -= 1
        fault = future.exception()
        if isinstance(fault, WorkerDied):
            self.tally.workers_lost += 1
            work.died[task] = work.died.get(task, 0) + 1
            if not work.over and work.died[task] < _ATTEMPTS:
                work.ready.append(task)
                return
        if work.over:
            return
        if fault is not None:
            self._fail(work, fault)
            return
        outcome = future.result()
        self._warm = True
        self.tally.peak_bytes = max(self.tally.peak_bytes, outcome.peak_bytes)
        self._count(work, task.size)
        more = work.steps.done(task, outcome)
        if isinstance(more, list):
            work.ready += more
        else:
            work.over = True
            self._count(work, work.case.look.size)
            self.tally.measured += 1
            self._enter(work.case, more)

    def _count(self, work: _Work, size: int) -> None:
        """Bytes of a job that count as done, never more than there are."""
        more = min(size, work.case.look.size - work.counted)
        work.counted += more
        self.tally.bytes_done += more

    def _fail(self, work: _Work, fault: BaseException) -> None:
        """Set a recording aside, or put it off; a fault of the results folder ends the run."""
        folder = self._terms.folder
        if is_folder_fault(fault, folder):
            expected = "room and leave to write; what is done is kept, the same command goes on"
            raise InputError(folder, "", fault_text(fault), expected) from fault
        work.over = True
        self._count(work, work.case.look.size)
        if isinstance(fault, StillGrowing):
            self.tally.growing += 1
            self._enter(replace(work.case, state=State.GROWING, reason=str(fault)))
            return
        reason = fault_text(fault)
        self.tally.failed += 1
        self.tally.failures.append((work.case.item.label, reason))
        attempts = work.case.attempts + 1
        self._enter(replace(work.case, state=State.FAILED, reason=reason, attempts=attempts))

    def _enter(self, case: Case, outcome: Outcome | None = None) -> None:
        """Enter a recording, and its measurement if there is one."""
        content = case.content if outcome is None else outcome.content
        row = {
            "path": str(case.item.path),
            "member": case.item.member,
            "name": case.item.stem,
            "state": case.state.value if outcome is None else State.MEASURED.value,
            "reason": case.reason if outcome is None else "",
            "measurement": None if outcome is None else outcome.measurement,
            "link": str(case.choice.link) if case.choice and case.choice.link else "",
            "asked": case.asked,
            "fingerprint": case.look.text if outcome is None else outcome.fingerprint,
            "content": None if content is None else f"{content.data} {content.whole}",
            "bytes": case.look.size,
            "attempts": case.attempts if outcome is None else 0,
            "changed_at": now(),
        }
        if outcome is None:
            self._catalogue.put(recordings=[row])
            return
        figures = outcome.tables["measurements"][0]
        figures |= {"seconds": outcome.seconds, "peak_bytes": outcome.peak_bytes}
        self._catalogue.replace_measurement(
            outcome.measurement, {**outcome.tables, "recordings": [row]}
        )


def now() -> str:
    """UTC, ISO 8601, to the second."""
    return datetime.now(UTC).isoformat(timespec="seconds")


def prepare_folder(folder: Path) -> None:
    """Make a results folder.

    Raises:
        InputError: it cannot be made or written.
    """
    try:
        for path in (folder, folder / RESULTS_FOLDER, folder / WORK_FOLDER):
            path.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        found = error.strerror or str(error)
        raise InputError(folder, "", found, "a folder that can be written") from error


def clear_leftovers(folder: Path, claims: Claims, *, finished: bool = False) -> None:
    """Remove what killed workers left half-written, if no other run is alive.

    `finished`: also what was kept of recordings that are shared out: none is under way.
    """
    if not claims.alone():
        return
    try:
        for partial in (folder / RESULTS_FOLDER).glob(".*.part"):
            partial.unlink(missing_ok=True)
        for work in (folder / WORK_FOLDER).iterdir():
            if finished:
                shutil.rmtree(work, ignore_errors=True)
                continue
            for partial in work.glob(".*.part"):
                partial.unlink(missing_ok=True)
    finally:
        claims.share()


def is_folder_fault(fault: BaseException, folder: Path) -> bool:
    """Whether the results folder is full, read-only or gone: no recording's fault."""
    if isinstance(fault, OSError | InputError) and folder_fault(fault) is not None:
        return True
    place = Path(fault.source) if isinstance(fault, InputError) else None
    if isinstance(fault, OSError) and fault.filename is not None:
        place = Path(os.fsdecode(fault.filename))
    ours = (folder / RESULTS_FOLDER, folder / WORK_FOLDER)
    return place is not None and any(place.is_relative_to(one) for one in ours)


def fault_text(fault: BaseException) -> str:
    """A fault in one line: what it says, or what it is where it is none that was foreseen."""
    if isinstance(fault, InputError):
        return str(fault)
    if isinstance(fault, WorkerDied):
        return f"{fault} {_ATTEMPTS} times: out of memory?"
    if isinstance(fault, OSError) and fault.strerror:
        place = "" if fault.filename is None else f" ({os.fsdecode(fault.filename)})"
        return f"{fault.strerror}{place}"
    if isinstance(fault, MemoryError):
        return f"not enough memory: {fault}"
    return " ".join(f"unforeseen {type(fault).__name__}: {fault}".split())
