"""The one task function: whatever executor runs it, a worker does `run_task(task)`.

Tasks name files, never hold samples; a worker opens what it needs. All that a task leaves behind
appears whole or not at all, and doing a task twice, even at the same time, does no harm.
"""

from __future__ import annotations

import errno
import os
import resource
import sys
import time
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from spatiq.batch.identity import (
    Content,
    Fingerprint,
    content_of,
    files_of,
    fingerprint,
    link_identity,
    measurement_key,
    options_identity,
)
from spatiq.batch.inputs import Item
from spatiq.batch.records import Tables, measurement_tables
from spatiq.errors import InputError, SpatiqError
from spatiq.kernels import compiled_here
from spatiq.link.description import Link
from spatiq.link.loading import load_link
from spatiq.metrics.measuring import measure
from spatiq.metrics.summary import Summary
from spatiq.receiver.options import ReceiverOptions
from spatiq.recording.recording import Recording
from spatiq.results.hdf5 import ResultsWriter
from spatiq.results.reader import open_results

RESULTS_FOLDER = "recordings"
NO_ROOM = (errno.ENOSPC, errno.EDQUOT, errno.EROFS, errno.EFBIG)
GROWING = "changed while it was measured"


class CompiledHere(SpatiqError):
    """A task that had to compile kernels: done anew in a process that takes them from the cache.

    Only so are results the same to the bit, whichever process makes them: see `compiled_here`.
    """


class StillGrowing(InputError):
    """A recording that changed under the measurement: to be taken up later."""


@dataclass(frozen=True)
class Job:
    """A recording to be measured, and how.

    Attributes:
        item: the recording.
        link: link description.
        options: how to receive.
        folder: of the results.
        bound: BER above which a frame counts as out.
        verify: compare data with core:sha512.
        content: digests, if the files look as they did when these were taken.
    """

    item: Item
    link: Path
    options: ReceiverOptions
    folder: Path
    bound: float
    verify: bool = False
    content: Content | None = None

    def open(self) -> tuple[Recording, Link]:
        """Open recording and link.

        Raises:
            InputError: either is broken.
        """
        return self.item.open(), load_link(self.link)

    def key(self, content: Content, link: Link) -> str:
        """Name of the measurement."""
        return measurement_key(content.whole, link_identity(link), options_identity(self.options))

    def target(self, key: str) -> Path:
        """Results file of a measurement; of one already there, whatever name it was made under."""
        folder = self.folder / RESULTS_FOLDER
        ending = f"-{key[:16]}.spatiq.h5"
        there = sorted(folder.glob(f"[!.]*{ending}"))
        return there[0] if there else folder / f"{self.item.stem[:120]}{ending}"


@dataclass
class Outcome:
    """What a task gives back.

    Attributes:
        tables: rows of the catalogue, when the recording is measured.
        measurement: its key.
        content: digests of the recording.
        fingerprint: how its files looked.
        seconds: processor time.
        peak_bytes: most memory that the worker has taken so far.
        reused: the results were there already.
        found: what else a task found out.
    """

    tables: Tables = field(default_factory=dict)
    measurement: str = ""
    content: Content | None = None
    fingerprint: str = ""
    seconds: float = 0.0
    peak_bytes: int = 0
    reused: bool = False
    found: Any = None


@dataclass(frozen=True)
class Task:
    """A piece of work: a module-level function and what it is called with."""

    function: Callable[..., Outcome]
    job: Job
    arguments: tuple[Any, ...] = ()
    size: int = 0  # bytes of recording that it deals with


def run_task(task: Task) -> Outcome:
    """Do a task in this process.

    Raises:
        InputError: the recording or the link is at fault.
        OSError: the results folder is full or closed; its number says which.
    """
    began = time.thread_time()
    try:
        outcome = task.function(task.job, *task.arguments)
    except (OSError, RuntimeError) as error:
        number = folder_fault(error)
        if number is None:
            raise
        raise OSError(number, os.strerror(number), str(task.job.folder)) from error
    outcome.seconds = time.thread_time() - began
    outcome.peak_bytes = peak_bytes()
    return outcome


def folder_fault(error: BaseException) -> int | None:
    """Number of the fault when a file could not be written for want of room or leave.

    The HDF5 library tells it in the text only, and fails once more, in other words, as the file is
    closed: all errors that led to this one are looked at.
    """
    seen: BaseException | None = error
    while seen is not None:
        for number in NO_ROOM:
            if isinstance(seen, OSError) and seen.errno == number:
                return number
            if f"errno = {number}," in str(seen) or os.strerror(number) in str(seen):
                return number
        seen = seen.__cause__ or seen.__context__
    return None


def peak_bytes() -> int:
    """Most memory this process has had at a time."""
    unit = 1 if sys.platform == "darwin" else 1024
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * unit


def looks(job: Job, recording: Recording) -> Fingerprint:
    """How the recording's files look now."""
    return fingerprint(files_of(job.item, recording))


def unchanged(job: Job, recording: Recording, before: Fingerprint) -> None:
    """Make sure of it.

    Raises:
        StillGrowing: the recording's files look different.
    """
    if looks(job, recording).text != before.text:
        raise StillGrowing(job.item.label, "", GROWING, "a recording that is complete")


_WATCHED = {"compiling": False}


def watch_compiling() -> None:
    """From now on this process keeps nothing that was computed after it had compiled a kernel."""
    _WATCHED["compiling"] = True


def fit_to_keep() -> None:
    """Called before anything that was computed is kept.

    Raises:
        CompiledHere: this process has compiled a kernel, and is watched.
    """
    if _WATCHED["compiling"] and compiled_here():
        raise CompiledHere("kernels were compiled")


def measure_whole(job: Job) -> Outcome:
    """Measure a recording in a single pass, unless its results are there."""
    recording, link = job.open()
    before = looks(job, recording)
    content = job.content or content_of(recording, verify=job.verify)
    key = job.key(content, link)
    target = job.target(key)
    reused = is_result(target, content, link, job.options)
    if not reused:
        unchanged(job, recording, before)
        summary = Summary(link, job.options.confidence)
        with ResultsWriter(target, link, recording, job.options, overwrite=True) as writer:
            for frames in measure(recording, link, job.options):
                writer.add(frames)
                summary.add(frames)
            fit_to_keep()
            unchanged(job, recording, before)
            writer.close(summary.as_dict(), content.data)
    return finished(job, recording, link, content, before, reused)


def finished(
    job: Job, recording: Recording, link: Link, content: Content, look: Fingerprint, reused: bool
) -> Outcome:
    """The outcome of a recording whose results file is in place."""
    key = job.key(content, link)
    group = link_identity(link) + options_identity(job.options)
    tables = measurement_tables(job.target(key), key, group, recording, job.bound)
    return Outcome(tables, key, content, look.text, reused=reused)


def is_result(path: Path, content: Content, link: Link, options: ReceiverOptions) -> bool:
    """Whether a whole results file of this measurement is in place."""
    if not path.is_file():
        return False
    try:
        with open_results(path) as results:
            return results.provenance["recording_sha256"] == content.data
    except InputError:
        return False  # damaged since, on a disk that failed: it is measured anew


def remove_unfinished(target: Path) -> None:
    """Remove what killed workers left of a results file; for whom holds the recording's claim."""
    for partial in target.parent.glob(f".{target.name[:200]}.*.part"):
        partial.unlink(missing_ok=True)


def limit_threads() -> None:
    """One thread a worker: workers share the cores out among themselves."""
    for name in ("OMP", "OPENBLAS", "MKL", "NUMEXPR", "NUMBA"):
        os.environ[f"{name}_NUM_THREADS"] = "1"
