"""Files that appear whole or not at all: written beside their place, then renamed."""

from __future__ import annotations

import os
import secrets
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from spatiq.errors import InputError
from spatiq.recording.safewrite import sync_folder


def check_target(path: Path, *, overwrite: bool = False) -> None:
    """Refuse a file that could not be written, before any work is spent on its contents.

    Raises:
        InputError: the folder is missing or closed to us, the name is taken by a folder, or the
            file is there and `overwrite` is not asked for.
    """
    folder = path.parent
    if not folder.is_dir():
        raise InputError(path, "", "no such folder", "a file in a folder that exists")
    if path.is_dir():
        raise InputError(path, "", "a folder", "the name of a file")
    if path.exists() and not overwrite:
        raise InputError(path, "", "a file that is already there", "a new name, or --overwrite")
    if not os.access(folder, os.W_OK):
        raise InputError(path, "", "a folder that is closed to writing", "one that may be written")


@contextmanager
def whole_file(path: Path, *, overwrite: bool = False) -> Iterator[Path]:
    """Lend a temporary name in the same folder; rename it to `path` when the block ends well.

    The file is there, empty; the block fills and closes it. Whatever ends the block early (an
    error, Ctrl-C) removes it, and a file that stood at `path` before is left as it was.

    Raises:
        InputError: as `check_target`, at the start and again before the renaming; or the system
            refuses to create the file.
    """
    check_target(path, overwrite=overwrite)
    partial = path.with_name(f".{path.name[:200]}.{os.getpid()}-{secrets.token_hex(4)}.part")
    try:
        partial.touch(exist_ok=False)
    except OSError as error:
        raise InputError(path, "", error.strerror, "a file that can be created") from error
    try:
        yield partial
        with partial.open("rb") as file:
            os.fsync(file.fileno())
        check_target(path, overwrite=overwrite)
        partial.replace(path)
    finally:
        partial.unlink(missing_ok=True)
    sync_folder(path.parent)
