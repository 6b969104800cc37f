"""Which recordings are meant: files, folders and patterns in, one item for each recording out."""

from __future__ import annotations

import os
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

from spatiq.errors import InputError
from spatiq.recording.archives import archive_members
from spatiq.recording.collection import read_collection
from spatiq.recording.opening import open_recording, recordings_in
from spatiq.recording.recording import Recording

_META, _DATA, _COLLECTION, _ARCHIVE = (
    ".sigmf-meta",
    ".sigmf-data",
    ".sigmf-collection",
    ".sigmf",
)
_ENDINGS = (_META, _DATA, _COLLECTION, _ARCHIVE)


@dataclass(frozen=True, order=True)
class Item:
    """A recording to be measured.

    Attributes:
        path: its metadata file, collection or archive; a data file when there is nothing else.
        member: which recording of an archive; empty for anything else.
        base: the folder that was given and that it was found in.
        fault: why it cannot even be looked at; empty when it can.
    """

    path: Path
    member: str = ""
    base: Path = Path()
    fault: str = ""

    @property
    def label(self) -> str:
        """How it is called: its path, and the recording's name in an archive."""
        return f"{self.path}:{self.member}" if self.member else str(self.path)

    @property
    def stem(self) -> str:
        """Base name without folder and ending."""
        name = Path(self.member).name if self.member else self.path.name
        for ending in _ENDINGS:
            if name.endswith(ending) and not self.member:
                return name[: -len(ending)]
        return name

    @property
    def folder(self) -> str:
        """Folder below the one that was given, with "/" between; "." for that itself."""
        return Path(os.path.relpath(self.path.parent, self.base)).as_posix()

    def open(self) -> Recording:
        """Open it.

        Raises:
            InputError: it is broken.
        """
        return open_recording(self.path, recording=self.member or None)


def find_items(inputs: Sequence[str | Path], leave_out: Sequence[Path] = ()) -> list[Item]:
    """All recordings meant by files, folders (with all below) and patterns, each once, in order.

    A recording that is a stream of a collection belongs to the collection. A data file without
    metadata is an item of its own, with its fault; so is an archive that cannot be read.

    Args:
        inputs: as the user gave them.
        leave_out: folders in which nothing is looked for: those of results.

    Raises:
        InputError: an input that means nothing.
    """
    items: dict[tuple[str, str], Item] = {}
    barred = {folder.resolve() for folder in leave_out}
    for given in inputs:
        for base, files in _files(str(given)):
            kept = [f for f in files if barred.isdisjoint(f.parents)]
            for item in _items(base, kept):
                items.setdefault((str(item.path), item.member), item)
    return sorted(items.values())


def _files(given: str) -> Iterator[tuple[Path, list[Path]]]:
    """Folders that were given or meant, and the files of recordings in them."""
    path = Path(given)
    if path.is_dir():
        yield path.resolve(), sorted(_below(path.resolve()))
        return
    if path.is_file() and path.name.endswith(_ENDINGS):
        yield path.parent.resolve(), [path.parent.resolve() / path.name]
        return
    named = [Path(f"{given}{e}") for e in _ENDINGS if e != _DATA and Path(f"{given}{e}").is_file()]
    if named:
        yield named[0].parent.resolve(), [named[0].parent.resolve() / named[0].name]
        return
    base, matches = _matching(given)
    if not matches:
        raise InputError(given, "", "nothing", "a recording, a folder, or a pattern that fits any")
    files = [m for m in matches if m.is_file()]
    for folder in (m for m in matches if m.is_dir()):
        files += _below(folder)
    yield base, sorted(set(files))


def _matching(pattern: str) -> tuple[Path, list[Path]]:
    """The folder in which a pattern looks, and what it fits; "**" stands for any depth."""
    parts = Path(pattern).parts
    fixed = next((k for k, part in enumerate(parts) if any(c in part for c in "*?[")), len(parts))
    base = Path(*parts[:fixed]).resolve()
    if fixed == len(parts):
        return base, []
    found = list(base.glob("/".join(parts[fixed:])))
    hidden = (any(p.startswith(".") for p in f.relative_to(base).parts) for f in found)
    return base, sorted(f for f, h in zip(found, hidden, strict=True) if not h)


def _below(folder: Path) -> Iterator[Path]:
    """Files of recordings in a folder and all below; hidden ones are left out."""
    for here, folders, files in os.walk(folder):
        folders[:] = sorted(f for f in folders if not f.startswith("."))
        for name in files:
            if name.endswith(_ENDINGS) and not name.startswith("."):
                yield Path(here) / name


def _items(base: Path, files: Iterable[Path]) -> Iterator[Item]:
    """Items of the files of one input."""
    found = {f for f in files if f.name.endswith(_ENDINGS)}
    streams: set[Path] = set()
    for file in sorted(f for f in found if f.name.endswith(_COLLECTION)):
        streams |= _streams(file)
        yield Item(file, base=base)
    for file in sorted(f for f in found if f.name.endswith(_META)):
        if file not in streams:
            yield Item(file, base=base)
    for file in sorted(f for f in found if f.name.endswith(_DATA)):
        meta = file.with_name(file.name[: -len(_DATA)] + _META)
        if meta in streams or meta in found:
            continue
        if meta.is_file():
            yield Item(meta, base=base)
        elif not _is_named(file):
            yield Item(file, base=base, fault=f"{meta}: found no such file; expected its metadata")
    for file in sorted(f for f in found if f.name.endswith(_ARCHIVE)):
        yield from _archived(file, base)


def _streams(collection: Path) -> set[Path]:
    """Metadata files of a collection's recordings; none when it cannot be read."""
    try:
        read = read_collection(collection.read_bytes(), str(collection))
    except (InputError, OSError):
        return set()  # told when it is opened
    return {collection.with_name(s.name + _META) for s in read.streams}


def _is_named(data: Path) -> bool:
    """Whether another recording's metadata in the folder name this data file as theirs."""
    quoted = f'"{data.name}"'.encode()
    others = (f for f in data.parent.iterdir() if f.name.endswith(_META))
    return any(quoted in f.read_bytes() for f in others if f.stat().st_size < 1 << 24)


def _archived(path: Path, base: Path) -> Iterator[Item]:
    """Recordings of an archive; streams of its collection belong to that."""
    try:
        names = recordings_in(path)
        streams: set[str] = set()
        if f"{names[0] if names else ''}{_COLLECTION}" in archive_members(path):
            opened = open_recording(path, recording=names[0])
            streams = {d.name for d in opened.datasets}
    except InputError as error:
        yield Item(path, base=base, fault=str(error))
        return
    if not names:
        yield Item(path, base=base, fault=f"{path}: found no recording; expected at least one")
    for k, name in enumerate(names):
        if not streams or k == 0 or Path(name).name not in streams:
            yield Item(path, name, base)
