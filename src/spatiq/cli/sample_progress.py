"""A progress bar on standard error for work on samples that takes longer than a moment."""

from __future__ import annotations

import time
from collections.abc import Iterator
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

PATIENCE_S = 1.0


def with_progress(
    blocks: Iterator[NDArray[np.complex64]], n_samples: int, label: str
) -> Iterator[NDArray[np.complex64]]:
    """Pass blocks (D, n) on; after a second, show how many of n_samples have passed.

    Nothing is shown when standard error is not a terminal.
    """
    from rich.console import Console
    from rich.progress import Progress

    console = Console(stderr=True)
    began = time.monotonic()
    done = 0
    with Progress(console=console, transient=True, disable=not console.is_terminal) as progress:
        task = progress.add_task(label, total=n_samples, visible=False)
        for block in blocks:
            yield block
            done += block.shape[1]
            late = time.monotonic() - began > PATIENCE_S
            progress.update(task, completed=done, visible=late)
