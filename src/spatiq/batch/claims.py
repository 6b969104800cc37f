"""Several runs on one results folder: each recording is worked on by one of them at a time.

A claim is a lock on one byte of a file, at an offset made of the recording's name. The system drops
it with the process that holds it, however that ends: there are no stale claims. A second file is
locked by every run that is alive; who holds it alone may clear away what killed runs left behind.
"""

from __future__ import annotations

import fcntl
import hashlib
import os
from pathlib import Path
from types import TracebackType

from spatiq.errors import InputError

_OFFSETS = 1 << 62


class Claims:
    """Claims of this run; a context manager, held as long as the process works on the folder."""

    def __init__(self, folder: Path) -> None:
        self._folder = folder
        self._held: set[int] = set()

    def __enter__(self) -> Claims:
        """Join the runs that are alive.

        Raises:
            InputError: the folder cannot be written, or its file system knows no locks.
        """
        try:
            self._claims = os.open(self._folder / ".claims", os.O_RDWR | os.O_CREAT, 0o666)
            self._runs = os.open(self._folder / ".runs", os.O_RDWR | os.O_CREAT, 0o666)
            fcntl.flock(self._runs, fcntl.LOCK_SH)
        except OSError as error:
            found = error.strerror or str(error)
            raise InputError(self._folder, "", found, "a folder to write and lock in") from error
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        """Drop all claims."""
        os.close(self._claims)
        os.close(self._runs)

    def alone(self) -> bool:
        """Whether no other run is alive; if so, none can start until `share` is called."""
        try:
            fcntl.flock(self._runs, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            fcntl.flock(self._runs, fcntl.LOCK_SH)
            return False
        return True

    def share(self) -> None:
        """Let other runs start."""
        fcntl.flock(self._runs, fcntl.LOCK_SH)

    def claim(self, name: str) -> bool:
        """Claim a recording; False when another run has it."""
        offset = _offset(name)
        try:
            fcntl.lockf(self._claims, fcntl.LOCK_EX | fcntl.LOCK_NB, 1, offset)
        except (BlockingIOError, PermissionError):
            return False
        self._held.add(offset)
        return True

    def drop(self, name: str) -> None:
        """Give a claim up."""
        offset = _offset(name)
        if offset in self._held:
            self._held.discard(offset)
            fcntl.lockf(self._claims, fcntl.LOCK_UN, 1, offset)


def _offset(name: str) -> int:
    return int.from_bytes(hashlib.sha256(name.encode()).digest()[:8], "big") % _OFFSETS
