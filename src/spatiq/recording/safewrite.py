"""Files that appear whole or not at all: written beside the target, flushed to disk, renamed."""

from __future__ import annotations

import json
import os
import secrets
from collections.abc import Iterator
from contextlib import contextmanager
from io import FileIO
from pathlib import Path
from typing import Any

from spatiq.errors import InputError
from spatiq.recording.jsontext import MAX_METADATA_BYTES


def refuse_existing(path: Path, overwrite: bool) -> None:
    """Refuse to replace a file unless that was asked for.

    Raises:
        InputError: the file is there, or its folder is not.
    """
    if not path.parent.is_dir():
        raise InputError(path.parent, "", "no such folder", "an existing folder to write to")
    if os.path.lexists(path) and not overwrite:
        raise InputError(path, "", "a file that exists", "a new name, or leave to overwrite")


@contextmanager
def writing_to(target: Path) -> Iterator[None]:
    """Turns an operating-system error of the enclosed steps into a refusal naming the target."""
    try:
        yield
    except OSError as error:
        found = error.strerror or type(error).__name__
        raise InputError(target, "", found, "a file that can be written") from error


@contextmanager
def new_file(target: Path) -> Iterator[tuple[FileIO, Path]]:
    """A temporary file in the target's folder; removed on leaving unless it was renamed.

    Yields the open file and its path. The caller writes, calls `sync`, and renames it.
    """
    path = target.parent / f".{target.name[:80]}.{secrets.token_hex(6)}.part"
    # Exclusive creation: never follows or empties something that is already there.
    with writing_to(target):
        file = FileIO(path, "xb")
    try:
        with file:
            yield file, path
    finally:
        path.unlink(missing_ok=True)


def write_all(file: FileIO, data: memoryview) -> None:
    """Write every byte of data: an unbuffered file may take only a part at a time."""
    done = 0
    while done < len(data):
        done += file.write(data[done:])


def sync(file: FileIO) -> None:
    """Flush a file to disk."""
    os.fsync(file.fileno())


def sync_folder(folder: Path) -> None:
    """Flush a folder's entries to disk, where the system can."""
    if os.name != "posix":
        return
    handle = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


def json_bytes(document: dict[str, Any], source: str) -> bytes:
    """Document as indented JSON text.

    Raises:
        InputError: something JSON has no form for (NaN, other types), or too large to be read.
    """
    try:
        text = json.dumps(document, indent=2, allow_nan=False)
    except (TypeError, ValueError) as error:
        raise InputError(source, "", str(error), "values that JSON can hold") from error
    data = text.encode("ascii") + b"\n"
    if len(data) > MAX_METADATA_BYTES:
        found = f"metadata of {len(data)} bytes"
        raise InputError(source, "", found, f"at most {MAX_METADATA_BYTES} bytes")
    return data


def write_bytes(target: Path, data: bytes) -> None:
    """Put a whole file in place.

    Raises:
        InputError: the folder or file cannot be written.
    """
    with new_file(target) as (file, path), writing_to(target):
        write_all(file, memoryview(data))
        sync(file)
        path.replace(target)
        sync_folder(target.parent)
