"""Where tasks run: processes of this machine, or the workers of a Dask cluster. Same tasks, same
futures; what differs is who starts the workers and who notices that one has died."""

from __future__ import annotations

import importlib
import json
import logging
import multiprocessing
import os
import pickle
import signal
import subprocess
import sys
import threading
import time
from concurrent.futures import Executor, Future, ProcessPoolExecutor
from concurrent.futures.process import BrokenProcessPool
from pathlib import Path
from typing import Any, Protocol, cast

import spatiq
from spatiq.batch.work import (
    CompiledHere,
    Outcome,
    Task,
    limit_threads,
    run_task,
    watch_compiling,
)
from spatiq.errors import InputError, SpatiqError

_WATCH_S = 0.5
_ANSWERS = "a scheduler that answers"
_MISSING = "the packages of the extra `cluster`, to work on a Dask cluster"


class WorkerDied(SpatiqError):
    """A worker was killed or crashed while it did a task."""


class Workers(Protocol):
    """What the run asks of an executor; a context manager."""

    count: int  # tasks that can be under way at a time
    place: str  # in words

    def __enter__(self) -> Workers:
        """Start them."""
        ...

    def __exit__(self, *_: object) -> None:
        """Stop them, whatever they are doing."""
        ...

    def submit(self, task: Task) -> Future[Outcome]:
        """Begin a task; its future may hold a fault, `WorkerDied` among them."""
        ...


def _start_worker(parent: int) -> None:
    """A worker's first act: one thread for the arithmetic, another that watches the parent."""
    limit_threads()
    watch_compiling()
    signal.signal(signal.SIGINT, signal.SIG_IGN)  # the parent decides what an interrupt means

    def watch() -> None:
        while os.getppid() == parent:
            time.sleep(_WATCH_S)
        os._exit(1)  # nobody is left to take the result

    threading.Thread(target=watch, daemon=True).start()


class LocalWorkers:
    """Processes of this machine, one executor for each: when one dies, it is known what it did."""

    def __init__(self, count: int) -> None:
        self.count = count
        self.place = f"{count} worker process{'es' if count > 1 else ''} on this machine"
        self._idle: list[ProcessPoolExecutor] = []
        self._all: set[ProcessPoolExecutor] = set()
        self._lock = threading.Lock()

    def __enter__(self) -> LocalWorkers:
        """Workers start with their first task."""
        return self

    def __exit__(self, *_: object) -> None:
        """End the processes at once; what they were writing is cleared away by its own rules."""
        with self._lock:
            executors, self._all, self._idle = self._all, set(), []
        for executor in executors:
            _end(executor)

    def submit(self, task: Task) -> Future[Outcome]:
        """See Workers."""
        outer: Future[Outcome] = Future()
        outer.set_running_or_notify_cancel()
        self._begin(task, outer)
        return outer

    def _begin(self, task: Task, outer: Future[Outcome]) -> None:
        """Hand a task to a worker; a new one when none is idle."""
        with self._lock:
            executor = self._idle.pop() if self._idle else self._new()
        try:
            inner = executor.submit(run_task, task)
        except BrokenProcessPool:  # it died while it was idle
            with self._lock:
                self._all.discard(executor)
                executor = self._new()
            inner = executor.submit(run_task, task)
        inner.add_done_callback(lambda done: self._done(executor, done, task, outer))

    def _new(self) -> ProcessPoolExecutor:
        context = multiprocessing.get_context("spawn")
        executor = ProcessPoolExecutor(
            1, mp_context=context, initializer=_start_worker, initargs=(os.getpid(),)
        )
        self._all.add(executor)
        return executor

    def _done(
        self,
        executor: ProcessPoolExecutor,
        inner: Future[Outcome],
        task: Task,
        outer: Future[Outcome],
    ) -> None:
        fault = None if inner.cancelled() else inner.exception()
        lost = inner.cancelled() or isinstance(fault, BrokenProcessPool)
        with self._lock:
            closed = executor not in self._all
            if lost or isinstance(fault, CompiledHere):
                self._all.discard(executor)
            elif not closed:
                self._idle.append(executor)
        if lost or closed:
            outer.set_exception(WorkerDied("the worker was killed or crashed"))
        elif isinstance(fault, CompiledHere):
            executor.shutdown(wait=False)
            self._begin(task, outer)
        else:
            _hand_on(inner, outer)


def _end(executor: ProcessPoolExecutor) -> None:
    """Stop a one-process executor without waiting for its task."""
    processes = list((executor._processes or {}).values())
    executor.shutdown(wait=False, cancel_futures=True)
    for process in processes:
        process.terminate()
    for process in processes:
        process.join()


def _hand_on(inner: Future[Outcome], outer: Future[Outcome]) -> None:
    fault = inner.exception()
    if fault is not None:
        outer.set_exception(fault)
    else:
        outer.set_result(inner.result())


class ClusterWorkers:
    """Workers of a Dask cluster, which see recordings and results under the same paths.

    Args:
        scheduler: address of the scheduler, or its file.
    """

    def __init__(self, scheduler: str) -> None:
        self._scheduler = scheduler
        self._client: Any = None
        self._executor: Executor | None = None
        self.count = 0
        self.place = ""

    def __enter__(self) -> ClusterWorkers:
        """Connect, and see whether the workers run this program.

        Raises:
            InputError: no package, no scheduler, no worker, or another program version.
        """
        distributed = _distributed()
        address = _address(self._scheduler)
        for chatty in ("distributed.client", "distributed", "tornado"):
            logging.getLogger(chatty).setLevel(logging.CRITICAL)  # faults are told in our words
        try:
            self._client = distributed.Client(address, timeout=20, set_as_default=False)
            self._client.wait_for_workers(1, timeout=60)
            # A worker may die while it is asked; those that answer are looked at.
            versions = set(self._client.run(_program_version, on_error="ignore").values())
        except (OSError, TimeoutError, ValueError) as error:
            self.__exit__()
            found = str(error) or type(error).__name__
            raise InputError("--scheduler", self._scheduler, found, _ANSWERS) from error
        if versions != {spatiq.__version__}:
            self.__exit__()
            found = f"program version {', '.join(sorted(versions))} on its workers"
            raise InputError("--scheduler", self._scheduler, found, spatiq.__version__)
        threads = self._client.nthreads()
        self.count = sum(threads.values())
        self.place = f"{len(threads)} cluster workers, {self.count} threads"
        self._executor = self._client.get_executor(pure=False)
        return self

    def __exit__(self, *_: object) -> None:
        """Take back what has not begun, and leave the cluster to itself."""
        if self._executor is not None:
            self._executor.shutdown(wait=False)
        if self._client is not None:
            self._client.close()

    def submit(self, task: Task) -> Future[Outcome]:
        """See Workers."""
        assert self._executor is not None
        try:
            # Workers may join or leave while it runs.
            self.count = max(1, sum(self._client.nthreads().values()))
            inner = self._executor.submit(run_on_cluster, task)
        except OSError as error:
            expected = "a scheduler that stays; what is done is kept, the same command goes on"
            raise InputError("--scheduler", self._scheduler, error, expected) from error
        outer: Future[Outcome] = Future()
        outer.set_running_or_notify_cancel()
        inner.add_done_callback(lambda done: _hand_on_from_cluster(done, outer))
        return outer


def _address(scheduler: str) -> str:
    """Address of a scheduler, out of its file if that is what was given.

    Raises:
        InputError: a file that is none of a scheduler.
    """
    file = Path(scheduler)
    if not file.is_file():
        return scheduler
    try:
        return str(json.loads(file.read_text(encoding="utf-8"))["address"])
    except (OSError, ValueError, KeyError, TypeError) as error:
        found = f"{type(error).__name__} while its address was read"
        raise InputError("--scheduler", scheduler, found, _ANSWERS) from error


def _distributed() -> Any:
    """Dask's distributed package, an optional extra.

    Raises:
        InputError: it is not installed.
    """
    try:
        return importlib.import_module("distributed")
    except ImportError as error:
        raise InputError("--scheduler", "", str(error), _MISSING) from error


def run_on_cluster(task: Task) -> Outcome:
    """Do a task in a cluster's worker; in a process of its own where that had to compile."""
    watch_compiling()
    try:
        return run_task(task)
    except CompiledHere:
        pass  # done anew below
    command = [sys.executable, "-m", "spatiq.batch.alone"]
    done = subprocess.run(command, input=pickle.dumps(task), capture_output=True, check=False)
    if done.returncode:
        said = done.stderr.decode(errors="replace").strip().splitlines()[-1:]
        raise WorkerDied(" ".join(["a process started by a worker ended early:", *said]))
    found = pickle.loads(done.stdout)
    if isinstance(found, BaseException):
        raise found
    return cast(Outcome, found)


def _program_version() -> str:
    limit_threads()
    return spatiq.__version__


def _hand_on_from_cluster(inner: Future[Outcome], outer: Future[Outcome]) -> None:
    if inner.cancelled():
        outer.set_exception(WorkerDied("the cluster took the task back"))
    elif isinstance(inner.exception(), _distributed().KilledWorker):
        outer.set_exception(WorkerDied("workers died of it again and again"))
    else:
        _hand_on(inner, outer)
