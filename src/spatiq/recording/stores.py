"""Where the bytes are: files of one folder, or members of an archive; opened lazily, read-only."""

from __future__ import annotations

import hashlib
import os
import stat
from collections.abc import Iterator
from dataclasses import dataclass
from io import FileIO
from pathlib import Path
from typing import Protocol

from spatiq.errors import InputError
from spatiq.recording.inputs import base_name
from spatiq.recording.jsontext import MAX_METADATA_BYTES

_HASH_BLOCK = 2**20


@dataclass(frozen=True)
class ByteRange:
    """A run of bytes within a file: a whole data file, or a member of an archive.

    Attributes:
        path: the file to open.
        offset: first byte.
        size: number of bytes when it was looked up.
        label: what messages call it.
    """

    path: Path
    offset: int
    size: int
    label: str

    def open(self) -> FileIO:
        """Open the file for reading, unbuffered.

        Raises:
            InputError: cannot be opened.
        """
        try:
            return FileIO(self.path, "rb")
        except OSError as error:
            raise cannot_read(self.label, error) from error

    def read_into(self, file: FileIO, start: int, view: memoryview) -> None:
        """Fill view with the bytes from `start` of this range.

        Raises:
            InputError: the file became shorter since it was looked up, or cannot be read.
        """
        try:
            file.seek(self.offset + start)
            done = 0
            while done < len(view):
                got = file.readinto(view[done:])
                if not got:
                    break
                done += got
        except OSError as error:
            raise cannot_read(self.label, error) from error
        if done < len(view):
            found = f"end of file after byte {start + done}"
            raise InputError(self.label, "", found, f"{self.size} bytes, as when it was opened")

    def chunks(self) -> Iterator[memoryview]:
        """The bytes in order; each chunk is valid until the next is asked for."""
        buffer = memoryview(bytearray(min(_HASH_BLOCK, max(self.size, 1))))
        with self.open() as file:
            for start in range(0, self.size, len(buffer)):
                view = buffer[: min(len(buffer), self.size - start)]
                self.read_into(file, start, view)
                yield view

    def hash(self, algorithm: str) -> str:
        """Hexadecimal digest of the bytes, streamed."""
        digest = hashlib.new(algorithm)
        for view in self.chunks():
            digest.update(view)
        return digest.hexdigest()

    def metadata_bytes(self) -> bytes:
        """All bytes of a metadata file.

        Raises:
            InputError: larger than MAX_METADATA_BYTES (checked before memory is taken).
        """
        if self.size > MAX_METADATA_BYTES:
            expected = f"metadata of at most {MAX_METADATA_BYTES} bytes"
            raise InputError(self.label, "", f"{self.size} bytes", expected)
        return b"".join(bytes(view) for view in self.chunks())


class Store(Protocol):
    """A folder as recordings see it: files by base name."""

    def find(self, name: str) -> ByteRange | None:
        """The file of that name, or None when there is none.

        Raises:
            InputError: it is there but not to be read (link out of the folder, device, ...).
        """
        ...

    def label(self, name: str) -> str:
        """What messages call the file of that name."""
        ...


def cannot_read(label: object, error: OSError) -> InputError:
    """The refusal that stands for an operating-system error."""
    return InputError(label, "", error.strerror or type(error).__name__, "a readable file")


@dataclass(frozen=True)
class Folder:
    """Files of one folder on disk; links that lead out of it are refused."""

    path: Path

    def find(self, name: str) -> ByteRange | None:
        """See Store."""
        base_name(name, str(self.path), "file name")
        path = self.path / name
        try:
            if not os.path.lexists(path):
                return None
            # Not Path.resolve: on a loop of links it raises another kind of error.
            real = Path(os.path.realpath(path, strict=True))
            if not real.is_relative_to(self.path.resolve()):
                raise InputError(path, "", "a link that leaves its folder", "a file in the folder")
            state = real.stat()
        except OSError as error:
            raise cannot_read(path, error) from error
        if not stat.S_ISREG(state.st_mode):
            raise InputError(path, "", "not a regular file", "a file")
        return ByteRange(real, 0, state.st_size, str(path))

    def label(self, name: str) -> str:
        """See Store."""
        return str(self.path / name)
