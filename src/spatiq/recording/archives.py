"""SigMF archives: members of a plain tar read in place, by byte offset, without unpacking."""

from __future__ import annotations

import tarfile
from collections.abc import Iterator
from dataclasses import dataclass
from io import BufferedReader
from pathlib import Path, PurePosixPath

from spatiq.errors import InputError
from spatiq.recording.inputs import shown
from spatiq.recording.stores import ByteRange, cannot_read

MAX_MEMBERS = 20_000
# Extended headers carry names; anything longer is not a name.
_MAX_EXTENDED = 2**16
_BLOCK = tarfile.BLOCKSIZE
_COMPRESSED = {
    b"\x1f\x8b": "gzip",
    b"BZh": "bzip2",
    b"\xfd7zXZ": "xz",
    b"\x28\xb5\x2f\xfd": "zstd",
    b"PK\x03\x04": "zip",
}
# A size in these headers is not followed by data.
_WITHOUT_DATA = (
    tarfile.LNKTYPE,
    tarfile.SYMTYPE,
    tarfile.CHRTYPE,
    tarfile.BLKTYPE,
    tarfile.DIRTYPE,
    tarfile.FIFOTYPE,
)
_FILES = (tarfile.REGTYPE, tarfile.AREGTYPE, tarfile.CONTTYPE)
_SUFFIXES = (".sigmf-meta", ".sigmf-data", ".sigmf-collection")


@dataclass(frozen=True)
class ArchiveFolder:
    """One folder inside an archive, as a store of files."""

    archive: Path
    prefix: str
    members: dict[str, ByteRange]

    def find(self, name: str) -> ByteRange | None:
        """See Store."""
        return self.members.get(self.prefix + name)

    def label(self, name: str) -> str:
        """See Store."""
        return f"{self.archive}({self.prefix}{name})"


def archive_members(path: Path) -> dict[str, ByteRange]:
    """Regular files of a plain tar: normalised name -> bytes.

    Raises:
        InputError: compressed, not a tar, cut off, a name that leaves the archive, a name twice,
            a link in place of a recording's file.
    """
    members: dict[str, ByteRange] = {}
    try:
        size = path.stat().st_size
        with path.open("rb") as file:
            head = file.read(6)
            for magic, kind in _COMPRESSED.items():
                if head.startswith(magic):
                    raise InputError(path, "", f"a {kind}-compressed file", "a plain tar archive")
            for name, member, start in _walk(file, size, path):
                key = _safe_name(name, path)
                if member.type not in _FILES:
                    if key.endswith(_SUFFIXES) and not member.isdir():
                        found = f"{shown(key)} stored as a link or special file"
                        raise InputError(path, "", found, "plain files in the archive")
                    continue
                if key in members:
                    raise InputError(path, "", f"{shown(key)} twice", "each file once")
                members[key] = ByteRange(path, start, member.size, f"{path}({key})")
    except OSError as error:
        raise cannot_read(path, error) from error
    return members


def _walk(
    file: BufferedReader, size: int, path: Path
) -> Iterator[tuple[str, tarfile.TarInfo, int]]:
    """Name, header and first data byte of each member; extended headers are followed."""
    position, name, length = 0, None, None
    for _ in range(3 * MAX_MEMBERS):
        file.seek(position)
        block = file.read(_BLOCK)
        if not block.strip(b"\0"):
            # The end mark; without one, the end of the file, if every member so far is whole.
            if not position:
                raise InputError(path, "", "an empty file", "a plain tar archive")
            return
        try:
            header = tarfile.TarInfo.frombuf(block, "utf-8", "surrogateescape")
        except tarfile.HeaderError as error:
            found = f"no tar header at byte {position} ({error})"
            raise InputError(path, "", found, "a plain tar archive") from error
        start = position + _BLOCK
        extended = header.type in (tarfile.XHDTYPE, tarfile.GNUTYPE_LONGNAME)
        if not extended and length is not None:
            header.size = length
        if header.type in _WITHOUT_DATA:
            header.size = 0
        if header.size < 0 or start + header.size > size:
            found = f"the end of the file inside {shown(name or header.name)}"
            raise InputError(path, "", found, "a whole archive")
        position = start + -(-header.size // _BLOCK) * _BLOCK
        if extended:
            if header.size > _MAX_EXTENDED:
                found = f"an extended header of {header.size} bytes"
                raise InputError(path, "", found, f"at most {_MAX_EXTENDED} bytes")
            data = file.read(header.size)
            if header.type == tarfile.GNUTYPE_LONGNAME:
                name = data.rstrip(b"\0").decode("utf-8", "surrogateescape")
            else:
                name, length = _pax_fields(data, name, path)
            continue
        if header.type in (tarfile.XGLTYPE, tarfile.GNUTYPE_LONGLINK):
            continue
        yield name or header.name, header, start
        name, length = None, None
    raise InputError(path, "", "too many members", f"at most {MAX_MEMBERS}")


def _pax_fields(data: bytes, name: str | None, path: Path) -> tuple[str | None, int | None]:
    """The path and size records of a POSIX extended header ("length key=value" lines)."""
    length: int | None = None
    while data.strip(b"\0"):
        digits, _, _ = data.partition(b" ")
        count = int(digits) if digits.isdigit() and len(digits) < 8 else 0
        key, equals, value = data[len(digits) + 1 : count - 1].partition(b"=")
        if not len(digits) + 2 < count <= len(data) or not equals:
            raise InputError(path, "", "a damaged extended header", "a plain tar archive")
        if key == b"path":
            name = value.decode("utf-8", "surrogateescape")
        elif key == b"size":
            if not value.isdigit() or len(value) > 19:
                raise InputError(path, "", "a damaged extended header", "a plain tar archive")
            length = int(value)
        elif key.startswith(b"GNU.sparse"):
            raise InputError(path, "", "a sparse member", "plain files in the archive")
        data = data[count:]
    return name, length


def _safe_name(name: str, path: Path) -> str:
    parts = PurePosixPath(name).parts
    if name.startswith("/") or "\\" in name or ".." in parts or any(ord(c) < 32 for c in name):
        raise InputError(path, "", f"member {shown(name)}", "names that stay in the archive")
    return "/".join(p for p in parts if p != ".")
