"""One task in a process of its own: pickled in on standard input, its outcome or fault out.

    python -m spatiq.batch.alone < TASK > OUTCOME

A process that compiles kernels keeps nothing; a second one then finds them in the cache.
"""

from __future__ import annotations

import pickle
import sys
from concurrent.futures import ProcessPoolExecutor
from multiprocessing import get_context

from spatiq.batch.work import CompiledHere, Task, limit_threads, run_task, watch_compiling

_TRIES = 4  # each may meet a kernel that no one has compiled yet


def _start() -> None:
    limit_threads()
    watch_compiling()


def main() -> None:
    """Do the task."""
    task: Task = pickle.loads(sys.stdin.buffer.read())
    fault: BaseException | None = None
    for _ in range(_TRIES):
        with ProcessPoolExecutor(1, mp_context=get_context("spawn"), initializer=_start) as one:
            future = one.submit(run_task, task)
            fault = future.exception()
            if not isinstance(fault, CompiledHere):
                break
    sys.stdout.buffer.write(pickle.dumps(fault if fault is not None else future.result()))


if __name__ == "__main__":
    main()
