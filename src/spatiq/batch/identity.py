"""What a measurement is of: the recording's content, the link, the options, the program.

Two recordings of equal content on the same link are one measurement; a recording that changes in
any of its files is another. Files that look unchanged (size and time of change) are not read again.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import spatiq
from spatiq.batch.inputs import Item
from spatiq.errors import InputError
from spatiq.link.description import Link
from spatiq.link.schema_payload import FileField
from spatiq.receiver.options import ReceiverOptions
from spatiq.recording.recording import Recording
from spatiq.results.hdf5 import LAYOUT_VERSION
from spatiq.results.provenance import sha256_text


@dataclass(frozen=True)
class Fingerprint:
    """How a recording's files look from outside.

    Attributes:
        text: changes whenever a size or time of change does.
        size: bytes of all files.
        newest: latest time of change, seconds since the epoch.
    """

    text: str
    size: int
    newest: float


def files_of(item: Item, recording: Recording | None) -> list[Path]:
    """Files behind an item: all of them when it could be opened, else what stands beside it."""
    paths = {item.path}
    if recording is not None:
        for dataset in recording.datasets:
            paths |= {dataset.metadata_file.path, dataset.data.path}
    else:
        paths.add(item.path.with_name(f"{item.stem}.sigmf-data"))
    return sorted(p for p in paths if p.exists())


def fingerprint(files: list[Path]) -> Fingerprint:
    """Look at files from outside.

    Raises:
        InputError: one is gone.
    """
    states = []
    for path in files:
        try:
            states.append((path.name, path.stat()))
        except OSError as error:
            found = error.strerror or type(error).__name__
            raise InputError(path, "", found, "a readable file") from error
    facts = [(name, s.st_size, s.st_mtime_ns) for name, s in states]
    return Fingerprint(
        sha256_text(json.dumps(facts)),
        sum(s.st_size for _, s in states),
        max((s.st_mtime for _, s in states), default=0.0),
    )


@dataclass(frozen=True)
class Content:
    """Digests of a recording: of its data files, as results state it, and of everything."""

    data: str
    whole: str


def content_of(recording: Recording, *, verify: bool = False) -> Content:
    """Read a recording once and take its digests.

    Args:
        recording: opened.
        verify: also compare the data with core:sha512, where metadata state it.

    Raises:
        InputError: a file that cannot be read, or data other than stated.
    """
    data = hashlib.sha256()
    whole = hashlib.sha256()
    if recording.collection is not None:
        whole.update(json.dumps(recording.collection, sort_keys=True).encode())
    for dataset in recording.datasets:
        whole.update(dataset.metadata_file.metadata_bytes())
        stated = dataset.metadata.sha512 if verify else None
        check = hashlib.sha512()
        for chunk in dataset.data.chunks():
            data.update(chunk)
            if stated is not None:
                check.update(chunk)
        if stated is not None and check.hexdigest() != stated:
            found = f"SHA-512 {check.hexdigest()[:16]}..."
            expected = f"{stated[:16]}... as core:sha512 says"
            raise InputError(dataset.data.label, "", found, expected)
    whole.update(data.digest())
    return Content(data.hexdigest(), whole.hexdigest())


def link_identity(link: Link) -> str:
    """Digest of a link description and of the files that it names."""
    digest = hashlib.sha256(link.text.encode())
    for path in _link_files(link):
        digest.update(path.name.encode() + b"\0")
        digest.update(hashlib.sha256(path.read_bytes()).digest())
    return digest.hexdigest()


def _link_files(link: Link) -> Iterator[Path]:
    if link.spec.payload is None or link.path is None:
        return
    for field in link.spec.payload.field:
        if isinstance(field, FileField):
            yield link.path.with_name(field.file)


def options_identity(options: ReceiverOptions) -> str:
    """Digest of all options that can change a figure, and of the program's version."""
    chosen = {k: v for k, v in options.as_dict().items() if k != "block_size"}
    facts = {"options": chosen, "program": spatiq.__version__, "layout": LAYOUT_VERSION}
    return sha256_text(json.dumps(facts, sort_keys=True))


def measurement_key(content: str, link: str, options: str) -> str:
    """Name of a measurement: hexadecimal digest of what it is of."""
    return sha256_text(f"{content} {link} {options}")
